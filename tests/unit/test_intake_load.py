"""From sessions to series: forms, times, order, components, slices, repeats, and what departs from the recipe."""

import numpy as np
import pydicom
import pytest
from intake_site import IR, PLATE, RECIPE, TE_MS, TI_MS, TRAIN, change, copied, edit, make_site, run
from numpy.testing import assert_allclose, assert_array_equal

from qa import intake
from qa.intake.checks import check_scan
from qa.locate import locate
from qa.simulate.header import COUNTS
from qa.simulate.scene import images, lay
from qa.site import Recipe, Scan
from qa.words import Consequence

FORMS = ["classic", "one-series", "enhanced"]


@pytest.fixture(scope="module")
def original(tmp_path_factory):
    return run(tmp_path_factory.mktemp("simulated") / "run")


@pytest.fixture
def record(original, tmp_path):
    return copied(original, tmp_path / "in")


def loaded(tmp_path, recipe=RECIPE):
    site = make_site(tmp_path / "site")
    (session,) = intake.gather([tmp_path / "in"], site, known=()).sessions
    return intake.load(session, recipe)


def codes(of):
    return [(remark.code, remark.subject) for remark in of.remarks]


@pytest.mark.parametrize("form", FORMS)
def test_every_form_gives_the_same_series(tmp_path, form):
    record = run(tmp_path / "in", form)
    got = loaded(tmp_path)
    assert (got.remarks, got.held) == ((), ())
    recovery, train = got.series
    assert (recovery.scan, train.scan) == (IR, TRAIN)
    assert_array_equal(recovery.ti_ms, TI_MS)
    assert_array_equal(recovery.te_ms, 12.0)
    assert_array_equal(recovery.tr_ms, 5000.0)
    assert_array_equal(train.te_ms, TE_MS)
    assert np.isnan(train.ti_ms).all()
    assert_array_equal(train.tr_ms, 3000.0)
    assert_array_equal(train.flip_deg, 90.0)
    assert recovery.frames.dtype == np.float32
    assert not recovery.signed
    assert recovery.slice_mm == 5.0
    assert recovery.grid.shape == (48, 48)
    assert recovery.grid.spacing_mm == (3.0, 3.0)
    assert_allclose(recovery.grid.to_patient_mm(23.5, 23.5), [0, 0, 0], atol=1e-6)
    rng = np.random.default_rng(5)
    true = np.abs(images(IR, record.truth, PLATE, lay(PLATE, record.truth), rng))
    assert_allclose(recovery.frames, true * COUNTS, atol=0.501)
    assert len({(s.sha256, s.frame) for s in recovery.sources}) == len(TI_MS)


@pytest.mark.parametrize("form", FORMS)
def test_the_order_of_files_and_names_does_not_matter(tmp_path, form):
    record = run(tmp_path / "in", form)
    before = loaded(tmp_path)
    folder = tmp_path / "in" / "shuffled"
    folder.mkdir()
    for k, path in enumerate(record.files):
        path.rename(folder / f"{(k * 7 + 3) % 23:02d}")
    after = loaded(tmp_path)
    for one, other in zip(before.series, after.series, strict=True):
        assert_array_equal(one.frames, other.frames)
        assert_array_equal(one.ti_ms, other.ti_ms)


def test_times_come_from_the_headers_not_from_the_recipe(record, tmp_path):
    edit(record.files[2], InversionTime="5.35E+02 ")
    recovery = loaded(tmp_path).series[0]
    assert_array_equal(recovery.ti_ms, [40, 200, 535, 1100, 2600])
    assert [(r.code, r.consequence) for r in recovery.remarks] == [("ti-differs", Consequence.WATCH)]
    assert "535" in recovery.remarks[0].text
    assert "500" in recovery.remarks[0].text


def test_missing_and_extra_times(record, tmp_path):
    record.files[1].unlink()
    edit(record.files[-1], EchoTime=80)
    got = loaded(tmp_path)
    assert codes(got) == [("ti-missing", "T1 IR"), ("te-differs", "T2 train")]
    assert "200" in got.remarks[0].text


def test_a_missing_scan_is_said(record, tmp_path):
    for path in record.files[len(TI_MS) :]:
        path.unlink()
    got = loaded(tmp_path)
    assert [one.scan.name for one in got.series] == ["T1 IR"]
    assert codes(got) == [("scan-missing", "T2 train")]
    assert "SeriesDescription matching 'QA ME.*'" in got.remarks[0].text


def test_series_that_no_scan_asks_for_are_named(record, tmp_path):
    for path in record.files[len(TI_MS) :]:
        edit(path, SeriesDescription="SURVEY")
    got = loaded(tmp_path)
    assert [one.code for one in got.remarks] == ["scan-missing", "unused-series"]
    assert "SURVEY" in got.remarks[1].text
    assert got.held == ()


def test_components(tmp_path):
    """Magnitude is taken where there is any; signed data where there is none; phase and maps never."""
    record = run(tmp_path / "in", recipe=Recipe(name="one", scans=(IR,)))
    only = Recipe(name="one", scans=(IR,))
    for k, mark in enumerate(("P", "PHASE MAP", "T1_MAP")):
        dataset = pydicom.dcmread(record.files[0])
        change(
            dataset,
            ImageType=["ORIGINAL", "PRIMARY", mark],
            SOPInstanceUID=f"1.2.3.{k}",
            PixelData=np.full((48, 48), 999, "<u2").tobytes(),
        )
        dataset.save_as(tmp_path / "in" / f"{mark}.dcm")
    got = loaded(tmp_path, only)
    assert codes(got) == [("frames-left-out", "T1 IR")]
    assert got.remarks[0].text.startswith("3 frames")
    assert not np.any(got.series[0].frames == 999)


@pytest.mark.parametrize("form", FORMS)
def test_signed_data_stay_signed(tmp_path, form):
    record = run(tmp_path / "in", form, written="real")
    recovery = loaded(tmp_path).series[0]
    assert recovery.signed
    assert recovery.frames.min() < -500
    want = images(IR, record.truth, PLATE, lay(PLATE, record.truth), np.random.default_rng(5))
    assert_allclose(recovery.frames, want.real * COUNTS, atol=0.501)
    assert recovery.remarks == ()


@pytest.mark.parametrize("form", FORMS)
def test_real_and_imaginary_parts_become_a_magnitude(tmp_path, form):
    record = run(tmp_path / "in", form, written="real-imaginary")
    got = loaded(tmp_path)
    recovery = got.series[0]
    assert not recovery.signed
    want = images(IR, record.truth, PLATE, lay(PLATE, record.truth), np.random.default_rng(5))
    assert_allclose(recovery.frames, np.abs(want) * COUNTS, atol=0.75)
    assert codes(got) == [("magnitude-made", "T1 IR"), ("magnitude-made", "T2 train")]


def test_a_part_without_its_other_is_not_used(tmp_path):
    record = run(tmp_path / "in", written="real-imaginary", recipe=Recipe(name="one", scans=(IR,)))
    next(path for path in record.files if "imaginary" in str(path) and "TI500" in path.name).unlink()
    got = loaded(tmp_path, Recipe(name="one", scans=(IR,)))
    assert_array_equal(got.series[0].ti_ms, [t for t in TI_MS if t != 500.0])
    assert ("part-missing", "T1 IR") in codes(got)
    assert ("ti-missing", "T1 IR") in codes(got)


def test_parts_that_never_meet_are_taken_by_the_real_ones(tmp_path):
    record = run(tmp_path / "in", written="real-imaginary", recipe=Recipe(name="one", scans=(IR,)))
    for path in record.files:
        if ("imaginary" in str(path)) != ("TI40" in path.name):
            path.unlink()
    recovery = loaded(tmp_path, Recipe(name="one", scans=(IR,))).series[0]
    assert recovery.signed
    assert_array_equal(recovery.ti_ms, TI_MS[1:])


def test_magnitudes_that_are_partly_negative_are_taken_as_signed(tmp_path):
    record = run(tmp_path / "in", written="real")
    for path in record.files:
        edit(path, ImageType=["ORIGINAL", "PRIMARY", "OTHER"])
    recovery = loaded(tmp_path).series[0]
    assert recovery.signed
    assert "negative-pixels" in {remark.code for remark in recovery.remarks}


def test_of_several_slices_the_middle_one_that_has_all_times_is_taken(tmp_path):
    base = run(tmp_path / "one", recipe=Recipe(name="one", scans=(IR,)))
    (tmp_path / "in").mkdir()
    for k, z in enumerate((-10.0, -5.0, 0.0, 5.0)):
        for path in base.files:
            dataset = pydicom.dcmread(path)
            stored = (dataset.pixel_array * 0 + 100 * (k + 1)).astype("<u2")
            corner = [*dataset.ImagePositionPatient[:2], z]
            change(dataset, ImagePositionPatient=corner, SOPInstanceUID=f"{dataset.SOPInstanceUID[:50]}.{k}")
            change(dataset, PixelData=stored.tobytes())
            if k != 2 or path != base.files[0]:  # the slice at 0 mm lacks its first time
                dataset.save_as(tmp_path / "in" / f"{k}-{path.name}")
    got = loaded(tmp_path, Recipe(name="one", scans=(IR,)))
    (series,) = got.series
    assert set(np.unique(series.frames)) == {200.0}  # the one at -5 mm: as near the middle as the incomplete one
    assert codes(got) == [("slice-chosen", "T1 IR")]
    assert series.grid.origin_mm[2] == -5.0


def test_repeated_frames_are_averaged(record, tmp_path):
    dataset = pydicom.dcmread(record.files[0])
    twice = (dataset.pixel_array + 10).astype("<u2")
    change(dataset, SOPInstanceUID="1.2.3", PixelData=twice.tobytes())
    dataset.save_as(tmp_path / "in" / "again.dcm")
    first = pydicom.dcmread(record.files[0]).pixel_array
    got = loaded(tmp_path)
    assert codes(got) == [("repeats-averaged", "T1 IR")]
    assert_allclose(got.series[0].frames[0], first + 5.0)
    assert_array_equal(got.series[0].ti_ms, TI_MS)


def test_later_echoes_of_a_recovery_scan_are_left_out(record, tmp_path):
    for path in record.files[: len(TI_MS)]:
        dataset = pydicom.dcmread(path)
        change(dataset, EchoTime=40, SOPInstanceUID=f"{dataset.SOPInstanceUID[:50]}.9")
        change(dataset, PixelData=np.full((48, 48), 7, "<u2").tobytes())
        dataset.save_as(path.with_suffix(".second"))
    recovery = loaded(tmp_path).series[0]
    assert_array_equal(recovery.te_ms, 12.0)
    assert not np.any(np.all(recovery.frames == 7, axis=(1, 2)))


def test_saturation_recovery_by_delay_and_by_repeat(tmp_path):
    delay = Scan(name="SR", quantity="T1", method="saturation-recovery", match={"SeriesDescription": "SR"}, ti_ms=TI_MS)
    record = run(tmp_path / "in", recipe=Recipe(name="r", scans=(delay,)))
    recipe = Recipe(name="r", scans=(delay,))
    assert_array_equal(loaded(tmp_path, recipe).series[0].ti_ms, TI_MS)
    for path, ti in zip(record.files, TI_MS, strict=True):
        edit(path, InversionTime=None, RepetitionTime=ti)
    got = loaded(tmp_path, recipe)
    assert_array_equal(got.series[0].ti_ms, TI_MS)
    assert np.isnan(got.series[0].tr_ms).all()
    assert ("delay-from-tr", "SR") in codes(got)


def test_scans_are_told_apart_by_any_keyword(record, tmp_path):
    for k, path in enumerate(record.files):
        edit(path, SeriesDescription="QA", ProtocolName="p1" if k < len(TI_MS) else "p2")
    scans = tuple(
        scan.model_copy(update={"match": {"SeriesDescription": "^QA$", "ProtocolName": name}})
        for scan, name in ((IR, "p1"), (TRAIN, "p2"))
    )
    site = make_site(tmp_path / "site")
    text = (site.folder / "recipe.toml").read_text()
    for scan in scans:
        old = RECIPE.scans[scans.index(scan)].match["SeriesDescription"]
        new = f'SeriesDescription = "^QA$", ProtocolName = "{scan.match["ProtocolName"]}"'
        text = text.replace(f'SeriesDescription = "{old}"', new)
    (site.folder / "recipe.toml").write_text(text)
    from qa.site import load_site

    mended = load_site(site.folder)
    (session,) = intake.gather([tmp_path / "in"], mended, known=()).sessions
    got = intake.load(session, mended.schedules[0].recipe)
    assert [len(one.frames) for one in got.series] == [len(TI_MS), len(TE_MS)]


def test_the_grid_maps_voxels_to_patient_millimetres(record, tmp_path):
    """PS3.3 C.7.6.2.1.1, equation C.7.6.2.1-1, on a coronal slice with unequal spacing."""
    for path in record.files:
        edit(
            path,
            ImagePositionPatient=[-60.0, 12.0, 80.0],
            ImageOrientationPatient=[1, 0, 0, 0, 0, -1],
            PixelSpacing=[2.0, 3.0],
        )
    grid = loaded(tmp_path).series[0].grid
    assert grid.spacing_mm == (2.0, 3.0)
    assert_allclose(grid.to_patient_mm(10.0, 4.0), [-60.0 + 4 * 3.0, 12.0, 80.0 - 10 * 2.0])


def test_an_orientation_that_is_none_is_taken_as_axial(record, tmp_path):
    for path in record.files:
        edit(path, ImageOrientationPatient=[1, 0, 0, 1, 0, 0], ImagePositionPatient=None)
    grid = loaded(tmp_path).series[0].grid
    assert_array_equal(grid.along_column, [0, 1, 0])


def test_no_plate_is_for_the_next_room_to_say(tmp_path):
    run(tmp_path / "in", empty=True)
    got = loaded(tmp_path)
    assert got.held == ()
    frames = np.concatenate([one.frames for one in got.series])
    assert locate(frames, got.series[0].grid.spacing_mm, PLATE).code == "no-plate"


@pytest.mark.parametrize("form", FORMS)
def test_a_session_from_the_archive_is_as_good_as_new(tmp_path, form):
    run(tmp_path / "in", form)
    site = make_site(tmp_path / "site")
    (session,) = intake.gather([tmp_path / "in"], site, known=()).sessions
    again, held = intake.session_from_archive(site, session.files, run=session.run)
    assert held == ()
    assert (again.run, again.acquired, again.field_t) == (session.run, session.acquired, session.field_t)
    assert [f.sha256 for f in again.files] == [f.sha256 for f in session.files]
    for one, other in zip(intake.load(session, RECIPE).series, intake.load(again, RECIPE).series, strict=True):
        assert_array_equal(one.frames, other.frames)
    twice = intake.load(session, RECIPE)  # the cache gives each file once; then it is read from the archive
    assert_array_equal(twice.series[0].frames, intake.load(again, RECIPE).series[0].frames)


def test_files_that_arrive_later_are_joined_to_their_run(record, tmp_path):
    site = make_site(tmp_path / "site")
    late = [path.rename(tmp_path / path.name) for path in record.files[:2]]
    (first,) = intake.gather([tmp_path / "in"], site, known=()).sessions
    (second,) = intake.gather(late, site, known={f.sha256 for f in first.files}).sessions
    assert second.run == first.run
    whole = intake.merge(second, first.files, site)
    assert len(whole.files) == 11
    assert whole.held == ()
    got = intake.load(whole, RECIPE)
    assert [len(one.frames) for one in got.series] == [len(TI_MS), len(TE_MS)]
    assert got.remarks == ()


TIMES = {"ti_ms": np.array(TI_MS), "te_ms": np.full(5, 12.0), "tr_ms": np.full(5, 5000.0)}


@pytest.mark.parametrize(
    ("change_to", "found"),
    [
        ({}, []),
        ({"ti_ms": np.array([40.3, 201, 500, 1100, 2600.0])}, []),  # within 1 %, or half a millisecond
        ({"ti_ms": np.array([40, 210, 500, 1100, 2600.0])}, ["ti-differs"]),
        ({"ti_ms": np.array([40, 500, 1100, 2600.0])}, ["ti-missing"]),
        ({"ti_ms": np.array([40, 200, 300, 500, 1100, 2600.0])}, ["ti-extra"]),
        ({"tr_ms": np.full(5, np.nan)}, ["tr-unknown"]),
        ({"tr_ms": np.full(5, 4900.0)}, ["tr-differs"]),
        ({"tr_ms": np.full(5, 4960.0)}, []),
    ],
)
def test_departures_from_the_recipe(change_to, found):
    assert [remark.code for remark in check_scan(IR, **(TIMES | change_to))] == found


def test_a_recipe_may_decide_what_follows():
    strict = IR.model_copy(update={"consequence": {"tr-differs": Consequence.VOID}})
    (remark,) = check_scan(strict, **(TIMES | {"tr_ms": np.full(5, 4900.0)}))
    assert (remark.consequence, remark.subject) == (Consequence.VOID, "T1 IR")


def test_echoes_against_the_recipe():
    times = {"ti_ms": np.full(6, np.nan), "te_ms": np.array(TE_MS), "tr_ms": np.full(6, 3000.0)}
    assert check_scan(TRAIN, **times) == []
    shorter = times | {"te_ms": np.array(TE_MS[:-1])}
    assert [remark.code for remark in check_scan(TRAIN, **shorter)] == ["te-missing"]


def test_scans_with_grids_of_their_own(tmp_path):
    """Two scans of one run may differ in matrix: only within a scan all must be alike."""
    one = run(tmp_path / "in" / "a", recipe=Recipe(name="a", scans=(IR,)))
    other = run(tmp_path / "in" / "b", recipe=Recipe(name="b", scans=(TRAIN,)), matrix=64)
    for path in other.files:
        edit(path, StudyInstanceUID=one.study_uid)
    got = loaded(tmp_path)
    assert [series.grid.shape for series in got.series] == [(48, 48), (64, 64)]
    assert got.held == ()
