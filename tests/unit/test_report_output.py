"""From values to files: nothing in a value can end a script element, and no page is ever half written."""

import json

import pytest
from hypothesis import given
from hypothesis import strategies as st

from qa.errors import ReportError
from qa.reading import Curve
from qa.report.figures import curves, plain_label, series, small_multiples
from qa.report.output import Output, embedded, slug


@given(
    st.recursive(
        st.text() | st.integers() | st.none(), lambda inner: st.lists(inner) | st.dictionaries(st.text(), inner)
    )
)
def test_embedded_json_is_the_same_value_and_ends_no_element(value):
    text = str(embedded(value))
    assert json.loads(text) == value
    assert "<" not in text
    assert "\u2028" not in text


def test_a_number_that_is_none_is_refused():
    with pytest.raises(ValueError):
        embedded([float("nan")])


def test_scanners_with_like_names_get_pages_of_their_own():
    names = ["North bay", "north bay", "North  bay", "../../etc", "", "…"]
    pages = {slug(name) for name in names}
    assert len(pages) == len(names)
    assert all("/" not in page and ".." not in page for page in pages)


def test_a_folder_that_cannot_be_written_is_named(tmp_path):
    (tmp_path / "pages").write_text("a file where the folder should be")
    with pytest.raises(ReportError, match="pages"):
        Output(tmp_path / "pages").share()


def test_no_spare_file_stays_behind(tmp_path):
    output = Output(tmp_path)
    output.share()
    assert {path.name for path in tmp_path.iterdir()} == {"style.css", "charts.js", "plotly.min.js"}


def test_labels_from_files_carry_no_tags():
    assert plain_label("<a href='x'>&") == "&lt;a href='x'&gt;&amp;"
    figure = series([{"x": ["2026-01-01"], "y": [1.0], "name": "<b>"}], "%", events=[("2026-01-01", "<i>")])
    assert figure["data"][0]["name"] == "&lt;b&gt;"
    assert figure["layout"]["annotations"][0]["text"] == "&lt;i&gt;"


@pytest.mark.parametrize("count", [1, 2, 3, 4, 12])
def test_cells_do_not_overlap(count):
    rows = [Curve(str(n), "T1", [1.0, 2.0], [3.0, 4.0], [3.0, 4.0], [0.0, 0.0], 1.0) for n in range(count)]
    cells = [
        {"label": str(n), "x": ["2026-01-01"], "y": [float("nan")], "u": [1.0], "limits": [5.0]} for n in range(count)
    ]
    for figure in (curves(rows, {}, "TI"), small_multiples(cells, "%")):
        layout = figure["layout"]
        boxes = [
            (*layout[f"xaxis{name}"]["domain"], *layout[f"yaxis{name}"]["domain"])
            for name in (key.removeprefix("xaxis") for key in layout if key.startswith("xaxis"))
        ]
        for place, (left, right, low, high) in enumerate(boxes):
            assert -1e-9 <= left < right <= 1 + 1e-9
            assert -1e-9 <= low < high <= 1 + 1e-9
            for other in boxes[place + 1 :]:
                apart = other[0] >= right or other[1] <= left or other[2] >= high or other[3] <= low
                assert apart
        json.dumps(figure, allow_nan=False)
