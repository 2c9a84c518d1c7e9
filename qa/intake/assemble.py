"""From a session and a recipe to calibrated series: which frames belong to which scan, in order, on one scale."""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, replace
from math import isnan

import numpy as np

from qa.errors import ArchiveError
from qa.intake.archive import Archive
from qa.intake.checks import check_scan, missing_scans
from qa.intake.claims import HeaderProblem
from qa.intake.header import FileHeader, FrameHeader
from qa.intake.holds import hold
from qa.intake.pixels import FOREIGN_BYTES, decode, scale_of, scaled, told
from qa.intake.reader import parse, quiet_pydicom
from qa.intake.series import FrameSource, Grid, Held, Series, Session
from qa.site.recipe import Recipe, Scan
from qa.words import Consequence, Floats, Pixels, Quantity, Remark


@dataclass(frozen=True, slots=True)
class Loaded:
    """A session's series in the recipe's order, what was noticed, and files that turned out to be unusable."""

    series: tuple[Series, ...]
    remarks: tuple[Remark, ...]
    held: tuple[Held, ...]


@dataclass(frozen=True, slots=True)
class _Frame:
    file: FileHeader
    head: FrameHeader


@dataclass(frozen=True, slots=True, eq=False)
class _Decoded:
    """One file's frames as float32 in comparable units, with the kind of scale each was on."""

    pixels: Pixels
    kinds: tuple[str, ...]


def load(session: Session, recipe: Recipe) -> Loaded:
    """Decode and sort a session's frames into the scans of its recipe.

    Frames of phase and maps are left out with a note; files without the time that their scan needs, or with another
    matrix than the rest of their scan, are held; of several slices the one nearest the middle that has all times is
    taken; frames repeated at one time are averaged.
    """
    remarks: list[Remark] = []
    held: dict[str, Held] = {}
    series: list[Series] = []
    decoded: dict[str, _Decoded | None] = {}
    used: set[str] = set()
    with quiet_pydicom():
        for scan in recipe.scans:
            files = [header for header in session.headers if matches(scan, header)]
            used |= {header.sha256 for header in files}
            frames, noted = _signal_frames(scan, files)
            remarks += noted
            frames = _one_matrix(_timed(scan, frames, held), held)
            frames = _one_slice(scan, frames, remarks)
            frames = _decode_all(session, frames, decoded, held)
            if any(frame.head.component != "imaginary" for frame in frames):
                series.append(_series(scan, frames, decoded))
    remarks += missing_scans(recipe, [one.scan.name for one in series])
    left = sorted(
        {h.facts.get("SeriesDescription", "without description") for h in session.headers if h.sha256 not in used}
    )
    if left:
        remarks.append(Remark("unused-series", f"kept, but no scan of the recipe asks for: {', '.join(left)}"))
    for one in series:
        remarks += one.remarks
    return Loaded(tuple(series), tuple(remarks), tuple(held.values()))


def matches(scan: Scan, header: FileHeader) -> bool:
    """Whether every regular expression of the scan is found in its keyword's value."""
    return all(
        re.search(pattern, header.wanted.get(keyword) or header.facts.get(keyword, "")) is not None
        for keyword, pattern in scan.match.items()
    )


def time_of(scan: Scan, frame: FrameHeader) -> float:
    """The time that the scan varies, ms: TI, or TE; TR where a saturation recovery states no TI and varies TR."""
    if scan.quantity is Quantity.T2:
        return frame.te_ms
    if scan.method == "saturation-recovery" and isnan(frame.ti_ms):
        return frame.tr_ms
    return frame.ti_ms


def _signal_frames(scan: Scan, files: Sequence[FileHeader]) -> tuple[list[_Frame], list[Remark]]:
    """Magnitude frames; where there are none, real and imaginary ones together, or real ones alone."""
    frames = [_Frame(file, head) for file in files for head in file.frames]
    by_kind = {kind: [f for f in frames if f.head.component == kind] for kind in ("magnitude", "real", "imaginary")}
    chosen = by_kind["magnitude"] or (by_kind["real"] + by_kind["imaginary"] if by_kind["real"] else [])
    left = len(frames) - len(chosen)
    if not chosen or not left:
        return chosen, []
    text = f"{left} frames of phase, other components or maps are not used"
    return chosen, [Remark("frames-left-out", text, subject=scan.name)]


def _timed(scan: Scan, frames: Sequence[_Frame], held: dict[str, Held]) -> list[_Frame]:
    """Frames that state their time; the files of the others are held."""
    good = []
    for frame in frames:
        if isnan(time_of(scan, frame.head)):
            what = "no InversionTime" if scan.quantity is Quantity.T1 else "no EchoTime"
            detail = f"{what} for scan '{scan.name}'"
            held.setdefault(frame.file.sha256, hold(frame.file.path, "missing-timing", detail, frame.file.sha256))
        else:
            good.append(frame)
    return good


def _shape(frame: _Frame) -> tuple[object, ...]:
    head = frame.head
    return (
        frame.file.rows,
        frame.file.columns,
        tuple(round(v, 3) for v in head.spacing_mm),
        tuple(round(v, 2) for v in head.directions),
    )


def _one_matrix(frames: Sequence[_Frame], held: dict[str, Held]) -> list[_Frame]:
    """The frames of the commonest matrix, pixel size and orientation; the files of the others are held."""
    if not frames:
        return []
    counted = Counter(_shape(frame) for frame in frames)
    usual = max(counted, key=lambda shape: (counted[shape], str(shape)))
    for frame in frames:
        if _shape(frame) != usual:
            detail = f"{frame.file.rows} x {frame.file.columns}, pixels of {frame.head.spacing_mm[0]:g} mm"
            held.setdefault(frame.file.sha256, hold(frame.file.path, "mixed-matrix", detail, frame.file.sha256))
    return [frame for frame in frames if _shape(frame) == usual]


def _one_slice(scan: Scan, frames: Sequence[_Frame], remarks: list[Remark]) -> list[_Frame]:
    """Of several slice positions the one nearest their middle among those with the most times."""
    if not frames:
        return []
    directions = np.asarray(frames[0].head.directions)
    normal = np.cross(directions[:3], directions[3:])
    slices: dict[float, list[_Frame]] = {}
    for frame in frames:
        slices.setdefault(round(float(normal @ np.asarray(frame.head.position_mm)), 1), []).append(frame)
    if len(slices) == 1:
        return list(frames)
    times = {at: len({round(time_of(scan, f.head), 3) for f in group}) for at, group in slices.items()}
    most = max(times.values())
    middle = float(np.mean(list(slices)))
    chosen = min((at for at in slices if times[at] == most), key=lambda at: (abs(at - middle), at))
    text = f"of {len(slices)} slices the one at {chosen:g} mm, nearest the middle, is measured"
    remarks.append(Remark("slice-chosen", text, subject=scan.name))
    return slices[chosen]


def _decode_all(
    session: Session, frames: Sequence[_Frame], decoded: dict[str, _Decoded | None], held: dict[str, Held]
) -> list[_Frame]:
    """Decode the files of these frames (each once per session); frames of files that fail are left out."""
    for file in dict.fromkeys(frame.file for frame in frames):
        if file.sha256 not in decoded:
            one = _decode(session, file)
            if isinstance(one, Held):
                held[file.sha256] = one
                decoded[file.sha256] = None
            else:
                decoded[file.sha256] = one
    return [frame for frame in frames if decoded[frame.file.sha256] is not None]


def _decode(session: Session, file: FileHeader) -> _Decoded | Held:
    dataset = session.cache.take(file.sha256) if session.cache else None
    try:
        if dataset is None:
            if session.archive is None:
                return hold(file.path, "archive-lost", "there is no archive", file.sha256)
            dataset = parse(Archive(session.archive).read(file.sha256))
        stored = decode(dataset, len(file.frames))
        scales = [scale_of(dataset, head.index) for head in file.frames]
        pixels = np.stack([scaled(one, slope, offset) for one, (_, slope, offset) in zip(stored, scales, strict=True)])
    except ArchiveError as error:
        return hold(file.path, "archive-lost", error.what, file.sha256)
    except HeaderProblem as problem:
        return hold(file.path, problem.code, problem.detail, file.sha256)
    except FOREIGN_BYTES as error:
        return hold(file.path, "damaged", told(error), file.sha256)
    return _Decoded(pixels, tuple(kind for kind, _, _ in scales))


def _series(scan: Scan, frames: Sequence[_Frame], decoded: dict[str, _Decoded | None]) -> Series:
    """One series from decoded frames: sorted by time, repeats averaged, checked against the recipe."""
    remarks: list[Remark] = []
    groups: dict[float, list[_Frame]] = {}
    kept = [f.head.te_ms for f in frames if f.head.component != "imaginary" and not isnan(f.head.te_ms)]
    shortest_te = min(kept, default=float("nan"))
    for frame in frames:
        second_echo = scan.quantity is Quantity.T1 and frame.head.te_ms > shortest_te + 0.5
        if not second_echo:
            groups.setdefault(round(time_of(scan, frame.head), 3), []).append(frame)
    stack, times, kinds = _stacked(scan, groups, decoded, remarks)
    if "private" in kinds and len(kinds) > 1:
        text = f"scan '{scan.name}': some frames carry a private scale and some do not, so they are not on one scale"
        remarks.append(Remark("mixed-scale", text, Consequence.VOID, scan.name))
    signed = frames[0].head.component == "real" and "magnitude-made" not in {remark.code for remark in remarks}
    if not signed and np.mean(stack < 0) > 0.01:
        signed = True
        text = "called magnitude, but partly negative: taken as signed"
        remarks.append(Remark("negative-pixels", text, subject=scan.name))
    firsts = [groups[time][0] for time in times]
    ti_ms = _column([time if scan.quantity is Quantity.T1 else firsts[i].head.ti_ms for i, time in enumerate(times)])
    te_ms, tr_ms = _column([f.head.te_ms for f in firsts]), _column([f.head.tr_ms for f in firsts])
    varied_tr = scan.method == "saturation-recovery" and all(isnan(f.head.ti_ms) for f in firsts)
    if varied_tr:
        remarks.append(
            Remark("delay-from-tr", "no delay is stated: TR is taken as the recovery time", subject=scan.name)
        )
    remarks += check_scan(scan, ti_ms, te_ms, np.empty(0) if varied_tr else tr_ms)
    head = firsts[0].head
    directions = np.asarray(head.directions, dtype=float)
    return Series(
        scan=scan,
        frames=stack,
        signed=signed,
        ti_ms=ti_ms,
        te_ms=te_ms,
        tr_ms=np.full(len(times), np.nan) if varied_tr else tr_ms,
        flip_deg=_column([f.head.flip_deg for f in firsts]),
        grid=Grid(
            shape=(firsts[0].file.rows, firsts[0].file.columns),
            spacing_mm=(head.spacing_mm[0], head.spacing_mm[1]),
            origin_mm=np.asarray(head.position_mm, dtype=float),
            along_row=_unit(directions[:3]),
            along_column=_unit(directions[3:]),
        ),
        slice_mm=head.slice_mm,
        sources=tuple(FrameSource(f.file.sha256, f.head.index) for f in firsts),
        facts=firsts[0].file.facts,
        remarks=tuple(replace(r, subject=r.subject or scan.name) for r in remarks),
    )


def _stacked(
    scan: Scan, groups: dict[float, list[_Frame]], decoded: dict[str, _Decoded | None], remarks: list[Remark]
) -> tuple[Pixels, list[float], set[str]]:
    """One image per time, in order; repeats are averaged, real and imaginary parts made into a magnitude."""
    complex_parts = any({"real", "imaginary"} <= {f.head.component for f in group} for group in groups.values())
    images: dict[float, Pixels] = {}
    kinds: set[str] = set()
    repeats, alone = 0, []
    for time in sorted(groups):
        parts: dict[str | None, list[Pixels]] = {}
        for frame in groups[time]:
            one = decoded[frame.file.sha256]
            if one is not None:
                parts.setdefault(frame.head.component, []).append(one.pixels[frame.head.index])
                kinds.add(one.kinds[frame.head.index])
        repeats += sum(len(same) - 1 for same in parts.values())
        means = {kind: same[0] if len(same) == 1 else np.mean(same, axis=0) for kind, same in parts.items()}
        if complex_parts and len(means) == 2:
            images[time] = np.hypot(means["real"], means["imaginary"])
        elif not complex_parts and "imaginary" not in means:
            images[time] = next(iter(means.values()))
        else:
            alone.append(time)
    if repeats:
        remarks.append(Remark("repeats-averaged", f"{repeats} repeated frames were averaged", subject=scan.name))
    if complex_parts:
        text = "there is no magnitude: it was made of the real and imaginary parts"
        remarks.append(Remark("magnitude-made", text, subject=scan.name))
    if alone:
        listed = ", ".join(f"{time:g}" for time in alone)
        text = f"at {listed} ms only one of the real and imaginary parts is there; these times are not used"
        remarks.append(Remark("part-missing", text, Consequence.WATCH, scan.name))
    stack = np.stack([*images.values()]).astype(np.float32, copy=False)
    return stack, [*images], kinds


def _column(values: Sequence[float]) -> Floats:
    return np.asarray(values, dtype=np.float64)


def _unit(vector: Floats) -> Floats:
    length = float(np.linalg.norm(vector))
    return np.asarray(vector / length) if length > 0 else vector
