"""Hypothesis strategies for what the store room takes: any measurement that the types allow, however odd."""

import string

from hypothesis import strategies as st

from qa.locate.placement import Placement
from qa.reading import Budget, Circle, Curve, Measurement, Picture, Reading
from qa.words import Consequence, Quantity, Remark, State

finite = st.floats(allow_nan=False, allow_infinity=False)
size = st.floats(min_value=0.0, max_value=1e12, allow_nan=False)
# Any text that is UTF-8: names from DICOM and files may hold markup, quotes, other scripts, line ends.
text = st.text(st.characters(codec="utf-8", exclude_characters="\0"), max_size=20)
label = st.text(st.sampled_from(string.ascii_letters + string.digits + " /%-ßΩ'\""), min_size=1, max_size=8)


def maybe(strategy):
    return st.none() | strategy


@st.composite
def readings(draw):
    """Up to six readings with different scan and vial."""
    names = draw(st.lists(st.tuples(label, label), unique=True, max_size=6))
    return tuple(
        Reading(
            vial=vial,
            quantity=draw(st.sampled_from(Quantity)),
            scan=scan,
            method=draw(label),
            method_version=draw(label),
            state=draw(st.sampled_from(State)),
            notes=tuple(draw(st.lists(text, max_size=3))),
            voxels=draw(st.integers(0, 10**6)),
            excluded_voxels=draw(st.integers(0, 10**6)),
            value_ms=draw(maybe(finite)),
            u_ms=draw(maybe(size)),
            budget=draw(maybe(st.builds(Budget, size, size, size, size))),
            value_at_reference_ms=draw(maybe(finite)),
            u_at_reference_ms=draw(maybe(finite)),
            reference_ms=draw(maybe(finite)),
            u_reference_ms=draw(maybe(finite)),
            deviation_percent=draw(maybe(finite)),
            u_deviation_percent=draw(maybe(finite)),
        )
        for scan, vial in names
    )


placements = st.builds(
    Placement,
    centre_row=finite,
    centre_column=finite,
    rotation_deg=finite,
    flipped=st.booleans(),
    scale=finite,
    residual_mm=finite,
    confidence=finite,
    seen=st.lists(label, max_size=3).map(tuple),
    missing=st.lists(label, max_size=3).map(tuple),
)
numbers = st.lists(finite, max_size=4)
curves = st.builds(Curve, label, label, numbers, numbers, numbers, numbers, finite)
circles = st.builds(Circle, label, finite, finite, finite, st.sampled_from(State))
pictures = st.builds(
    Picture,
    scan=label,
    rows=st.integers(1, 4096),
    columns=st.integers(1, 4096),
    spacing_mm=st.tuples(finite, finite),
    png=st.binary(max_size=64),
    circles=st.lists(circles, max_size=3).map(tuple),
)
measurements = st.builds(
    Measurement,
    readings=readings(),
    placement=maybe(placements),
    placement_centre_mm=maybe(st.tuples(finite, finite, finite)),
    celsius=maybe(finite),
    u_celsius=maybe(finite),
    celsius_source=text,
    remarks=st.lists(st.builds(Remark, label, text, st.sampled_from(Consequence), text), max_size=3).map(tuple),
    curves=st.lists(curves, max_size=3).map(tuple),
    pictures=st.lists(pictures, max_size=2).map(tuple),
    shared=st.dictionaries(text, finite, max_size=3),
    software=text,
    coil=text,
)
