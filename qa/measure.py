"""Run = series + plate + recipe -> readings: each with its uncertainty budget, method and state.

One pass: place the plate, average the voxels of each vial, fit T1 first and T2 with the T1 of the same run, look at
the voxels one by one for differences beyond noise, judge plausibility, correct for temperature. Knows nothing of the
database.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from math import hypot, isfinite

import numpy as np

from qa import fit
from qa.evidence import curves_of, picture_of
from qa.fit.estimate import Estimate, Signals
from qa.intake.series import Series
from qa.locate import calm, independent_voxels, locate, regions
from qa.locate.placement import NotLocated, Placement, Region
from qa.plausible import doubts
from qa.reading import Budget, Curve, Measurement, Picture, Reading
from qa.site.plate import Plate, Reference
from qa.temperature import RunTemperature, correct
from qa.words import Consequence, Floats, Ints, Quantity, Remark, State

PRIOR_FREEDOM = 2.0  # what the other vials' differences weigh against a vial's own
PATCH_VOXELS = 9.0  # voxels over which differences inside a vial are taken to hang together (a 3 x 3 patch)
FEW_VOXELS = 5  # fewer voxels than this are used, but marked


@dataclass(frozen=True, slots=True, eq=False)
class _Scanned:
    """One series with its plate found: regions in the plate's order, and those that can be fitted."""

    series: Series
    regions: tuple[Region, ...]
    fitted: tuple[int, ...]  # indices into `regions`


@dataclass(frozen=True, slots=True, eq=False)
class _Fitted:
    scanned: _Scanned
    signals: Signals
    estimate: Estimate
    u_region_ms: Floats  # (vials fitted,)


def measure(
    series: Sequence[Series],
    plate: Plate,
    field_t: float,
    temperature: RunTemperature,
    remarks: Sequence[Remark] = (),
) -> Measurement:
    """Measure every vial of `plate` in every series of one run.

    Parameters
    ----------
    series : the run's calibrated series, one per scan of the recipe
    plate : the phantom's plate with its references
    field_t : field strength, tesla; chooses the references
    temperature : what is known of the run's temperature
    remarks : what intake noticed; a void remark with a scan as its subject makes that scan's readings void

    Returns
    -------
    Measurement
        With a void remark where nothing could be measured; never an error for bad data.
    """
    noticed = list(remarks)
    scanned, placement, centre_mm, not_found = _place(series, plate)
    noticed += not_found
    voided = {
        remark.subject: remark.text for remark in noticed if remark.consequence is Consequence.VOID and remark.subject
    }
    t1_first = sorted(scanned, key=lambda one: one.series.scan.quantity is not Quantity.T1)
    readings: dict[str, list[Reading]] = {}
    curves: list[Curve] = []
    pictures: list[Picture] = []
    shared: dict[str, float] = {}
    t1_known: dict[str, tuple[float, float]] = {}
    for one in t1_first:
        done = _fit(one, plate, t1_known)
        scan = one.series.scan
        rows = _readings(one, done, plate, field_t, temperature, t1_known, voided.get(scan.name))
        readings[scan.name] = rows
        if scan.quantity is Quantity.T1:
            _remember_t1(t1_known, rows)
        pictures.append(picture_of(one.series, one.regions, plate, placement, rows))
        if done is not None:
            curves += curves_of(done.signals, done.estimate, [plate.vials[i].label for i in one.fitted], scan.name)
            shared |= {f"{scan.name}: {name}": value for name, value in done.estimate.shared.items()}
            shared[f"{scan.name}: snr"] = _snr(done.signals)
    if placement is not None:
        shared["placement: scale"] = placement.scale
    in_recipe_order = [row for one in scanned for row in readings[one.series.scan.name]]
    if not scanned and not any(r.consequence is Consequence.VOID and not r.subject for r in noticed):
        noticed.append(Remark("nothing-to-measure", "no scan of the recipe could be read", Consequence.VOID))
    facts = series[0].facts if series else {}
    return Measurement(
        readings=tuple(in_recipe_order),
        placement=placement,
        placement_centre_mm=centre_mm,
        celsius=temperature.celsius,
        u_celsius=temperature.u_celsius,
        celsius_source=temperature.source,
        remarks=tuple(noticed),
        curves=tuple(curves),
        pictures=tuple(pictures),
        shared=shared,
        software=facts.get("SoftwareVersions", ""),
        coil=facts.get("ReceiveCoilName", ""),
    )


def _place(
    series: Sequence[Series], plate: Plate
) -> tuple[list[_Scanned], Placement | None, tuple[float, float, float] | None, list[Remark]]:
    """Find the plate once per image grid; series that share a grid are searched together."""
    groups: dict[tuple[object, ...], list[Series]] = {}
    for one in series:
        grid = one.grid
        axes = np.concatenate([grid.origin_mm, grid.along_row, grid.along_column])
        key = (grid.shape, tuple(np.round(grid.spacing_mm, 4)), tuple(np.round(axes, 2)))
        groups.setdefault(key, []).append(one)
    scanned: dict[str, _Scanned] = {}
    remarks: list[Remark] = []
    first: Placement | None = None
    centre: tuple[float, float, float] | None = None
    for members in groups.values():
        grid = members[0].grid
        # locate looks at edges, whatever their sign, so signed frames serve as they are
        frames = np.concatenate([one.frames for one in members])
        found = locate(frames, grid.spacing_mm, plate)
        if isinstance(found, NotLocated):
            for one in members:
                text = f"scan '{one.scan.name}': the plate was not found: {found.reason}"
                remarks.append(Remark(found.code, text, Consequence.VOID, one.scan.name))
            continue
        if first is None:
            first = found
            x, y, z = (float(v) for v in grid.to_patient_mm(found.centre_row, found.centre_column))
            centre = (x, y, z)
        for one in members:
            found_regions = regions(found, plate, one.frames, grid.spacing_mm)
            fitted = tuple(i for i, region in enumerate(found_regions) if region.visible and len(region.rows) > 0)
            scanned[one.scan.name] = _Scanned(one, found_regions, fitted)
    return [scanned[one.scan.name] for one in series if one.scan.name in scanned], first, centre, remarks


def _fit(one: _Scanned, plate: Plate, t1_known: dict[str, tuple[float, float]]) -> _Fitted | None:
    """Vial averages through the scan's method, and the voxels one by one for differences beyond noise."""
    if not one.fitted:
        return None
    series, scan = one.series, one.series.scan
    method = fit.METHODS[scan.method]
    chosen = [one.regions[i] for i in one.fitted]
    voxels = [series.frames[:, region.rows, region.columns].T.astype(np.float64) for region in chosen]
    calmed = calm(series.frames)  # ringing of what is around a vial stays out of its average
    quiet = [calmed[:, region.rows, region.columns].mean(axis=1, dtype=np.float64) for region in chosen]
    times = series.ti_ms if scan.quantity is Quantity.T1 else series.te_ms
    if len(times) < method.min_samples:
        return None
    vials = [plate.vials[i] for i in one.fitted]
    t1 = np.array([t1_known.get(vial.label, (np.nan, np.nan)) for vial in vials])
    signals = Signals(
        values=np.stack(quiet),
        times_ms=times,
        signed=series.signed,
        noise=fit.noise_of_regions(voxels, signed=series.signed),
        voxels=np.array([independent_voxels(region.rows, region.columns) for region in chosen]),
        tr_ms=_median_or(series.tr_ms, scan.tr_ms),
        te_ms=_median_or(series.te_ms, None),
        t1_ms=t1[:, 0],
        u_t1_ms=t1[:, 1],
        x_mm=np.array([vial.x_mm for vial in vials]),
        y_mm=np.array([vial.y_mm for vial in vials]),
        refocusing_deg=scan.refocusing_deg or 180.0,
    )
    estimate = method.fit(signals)
    owner = np.repeat(np.arange(len(voxels)), [len(block) for block in voxels])
    singles = replace(
        signals,
        values=np.concatenate(voxels),
        voxels=np.ones(len(owner)),
        t1_ms=t1[owner, 0],
        u_t1_ms=t1[owner, 1],
        x_mm=_at(signals.x_mm, owner),
        y_mm=_at(signals.y_mm, owner),
    )
    per_voxel = method.map(singles, estimate, owner)
    blocks = [per_voxel[owner == row] for row in range(len(voxels))]
    u_region = region_uncertainty(blocks, estimate.value_ms, estimate.u_ms, signals.voxels)
    return _Fitted(one, signals, estimate, u_region)


def region_uncertainty(per_voxel_ms: Sequence[Floats], value_ms: Floats, u_noise_ms: Floats, voxels: Floats) -> Floats:
    """What differences between a vial's voxels add to the standard uncertainty of its mean, (vials,), ms.

    The robust spread of the voxel values (1.4826 times the median absolute deviation), less what thermal noise alone
    gives one voxel, divided by the number of 3 x 3 patches: neighbours share ringing, shading and flow, so they are not
    counted as independent. A handful of voxels says little of a variance, so each vial's (relative to its value) is
    drawn towards the mean of all vials of the scan by their degrees of freedom.

    Parameters
    ----------
    per_voxel_ms : per vial, fitted voxel by voxel, NaN where that failed
    value_ms, u_noise_ms : (vials,), the vial averages and their standard uncertainty from noise
    voxels : (vials,), how many independent voxels were averaged

    References
    ----------
    Smyth (2004), Stat Appl Genet Mol Biol 3(1), article 3 (moderated variances). The degrees of freedom of a median
    absolute deviation are those of a standard deviation times its efficiency, 0.37 (Rousseeuw and Croux 1993, JASA 88,
    1273-1283).
    """
    excess, freedom = np.zeros(len(per_voxel_ms)), np.zeros(len(per_voxel_ms))
    for row, values in enumerate(per_voxel_ms):
        good = values[np.isfinite(values)]
        if len(good) >= 4 and np.isfinite(u_noise_ms[row]) and value_ms[row] > 0:
            spread = 1.4826 * float(np.median(np.abs(good - np.median(good))))
            excess[row] = (spread**2 - u_noise_ms[row] ** 2 * voxels[row]) / value_ms[row] ** 2
            freedom[row] = 0.37 * (len(good) - 1)
    if not freedom.any():
        return np.zeros(len(per_voxel_ms))
    common = max(float(np.average(excess, weights=freedom)), 0.0)
    drawn = np.maximum((freedom * excess + PRIOR_FREEDOM * common) / (freedom + PRIOR_FREEDOM), 0.0)
    patches = np.maximum(1.0, voxels / PATCH_VOXELS)
    return np.where(freedom > 0, np.nan_to_num(value_ms) * np.sqrt(drawn / patches), 0.0)


def _readings(
    one: _Scanned,
    done: _Fitted | None,
    plate: Plate,
    field_t: float,
    temperature: RunTemperature,
    t1_known: dict[str, tuple[float, float]],
    voided: str | None,
) -> list[Reading]:
    scan = one.series.scan
    method = fit.METHODS[scan.method]
    rows = {index: row for row, index in enumerate(one.fitted)} if done is not None else {}
    result = []
    for index, vial in enumerate(plate.vials):
        region = one.regions[index]
        reference = plate.reference(vial.label, scan.quantity, field_t)
        blank = Reading(
            vial=vial.label,
            quantity=scan.quantity,
            scan=scan.name,
            method=scan.method,
            method_version=method.version,
            state=State.NOT_DETERMINED,
            notes=(_why_blank(one, region, method.min_samples),),
            voxels=len(region.rows),
            excluded_voxels=region.excluded,
            value_ms=None,
            u_ms=None,
            budget=None,
            value_at_reference_ms=None,
            u_at_reference_ms=None,
            reference_ms=reference.value_ms if reference else None,
            u_reference_ms=reference.u_ms if reference else None,
            deviation_percent=None,
            u_deviation_percent=None,
        )
        if voided is not None:
            result.append(replace(blank, state=State.VOID, notes=(voided,)))
        elif done is None or index not in rows:
            result.append(blank)
        else:
            result.append(_one_reading(blank, done, rows[index], reference, temperature, t1_known.get(vial.label)))
    return result


def _one_reading(
    blank: Reading,
    done: _Fitted,
    row: int,
    reference: Reference | None,
    temperature: RunTemperature,
    t1: tuple[float, float] | None,
) -> Reading:
    estimate = done.estimate
    state, notes = estimate.states[row], list(estimate.notes[row])
    value = float(estimate.value_ms[row])
    if state not in (State.GOOD, State.MARKED) or not isfinite(value):
        return replace(blank, state=state, notes=tuple(notes))
    noise, model = float(estimate.u_ms[row]), float(estimate.u_model_ms[row])
    region = float(done.u_region_ms[row])
    u = hypot(noise, model, region)
    more = doubts(blank.quantity, value, u, t1, blank.voxels, blank.excluded_voxels, FEW_VOXELS)
    at_reference = deviation = u_deviation = u_at_reference = None
    u_temperature = 0.0
    if reference is not None:
        there = correct(value, temperature, reference.at_c, reference.per_k_percent, reference.u_per_k_percent)
        u_temperature = there.u_temperature_ms
        if there.note:
            notes.append(there.note)
        at_reference = there.value_ms
        u_at_reference = hypot(u * there.factor, u_temperature)
        deviation = 100.0 * (at_reference / reference.value_ms - 1.0)
        u_deviation = 100.0 * u_at_reference / reference.value_ms
    else:
        notes.append("no reference value at this field: not corrected for temperature, no deviation")
    return replace(
        blank,
        state=State.MARKED if more else state,
        notes=tuple(notes + more),
        value_ms=value,
        u_ms=u,
        budget=Budget(noise, model, region, u_temperature),
        value_at_reference_ms=at_reference,
        u_at_reference_ms=u_at_reference,
        deviation_percent=deviation,
        u_deviation_percent=u_deviation,
    )


def _why_blank(one: _Scanned, region: Region, least: int) -> str:
    if not region.visible:
        return "nothing like this vial at its place: missing, empty, or without signal in every image"
    if len(region.rows) == 0:
        return "no voxel lies clear of the vial's wall: the voxels are too large for this vial"
    samples = len(one.series.frames)
    return f"too few samples: {samples}, and the method needs {least}"


def _remember_t1(known: dict[str, tuple[float, float]], rows: list[Reading]) -> None:
    """Keep the most certain T1 of each vial for the T2 fits of the same run."""
    for row in rows:
        if row.value_ms is not None and row.u_ms is not None:
            _, u = known.get(row.vial, (0.0, float("inf")))
            if row.u_ms < u:
                known[row.vial] = (row.value_ms, row.u_ms)


def _snr(signals: Signals) -> float:
    """Median over vials of the largest signal over one voxel's noise."""
    return (
        float(np.median(np.max(np.abs(signals.values), axis=1)) / signals.noise) if signals.noise > 0 else float("nan")
    )


def _median_or(values: Floats, otherwise: float | None) -> float:
    good = values[np.isfinite(values)]
    if len(good):
        return float(np.median(good))
    return float("nan") if otherwise is None else float(otherwise)


def _at(values: Floats | None, index: Ints) -> Floats | None:
    return None if values is None else values[index]
