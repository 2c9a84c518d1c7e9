"""Classic MR Image files, one per frame (DICOM PS3.3 A.4): a series per time, or one series per scan."""

from __future__ import annotations

from datetime import timedelta
from pathlib import Path

from pydicom.uid import MRImageStorage

from qa.simulate.header import (
    ScanData,
    corner,
    describe,
    leave_out,
    pixels,
    put,
    put_private_slope,
    save,
    start,
    step_of,
    stored,
    uid,
)
from qa.simulate.truth import RunTruth


def write(folder: Path, truth: RunTruth, data: ScanData, study: str, *, series_per_time: bool) -> list[Path]:
    """Write one scan. With `series_per_time`, every inversion time and every separate echo-time scan has its own."""
    separate = series_per_time and data.scan.method != "spin-echo-train"
    paths = []
    for index, frame in enumerate(data.frames):
        ti, te = data.ti_ms[index], data.te_ms[index]
        time = f"TI{ti:g}" if ti is not None else f"TE{te:g}"
        series = 100 * data.number + (index + 1 if separate else 0) + (50 if data.part == "imaginary" else 0)
        instance = 1 if separate else index + 1
        kind = "" if data.part in ("magnitude", "real") and truth.written != "real-imaginary" else f"-{data.part}"
        path = folder / f"{data.number:02d}{kind}" / f"{time}.dcm"
        identity = (*data.identity, data.number, index)
        ds = start(path, MRImageStorage, uid(*identity, data.part, "image"), truth, uid(study))
        ds.StudyInstanceUID = study
        put(ds, describe(data, time if separate else ""))
        moment = truth.acquired + timedelta(minutes=4 * data.number, seconds=2 * index if separate else 0)
        ds.AcquisitionDate, ds.AcquisitionTime = moment.strftime("%Y%m%d"), moment.strftime("%H%M%S")
        spacing = truth.field_of_view_mm / truth.matrix
        ds.ImageType = ["ORIGINAL", "PRIMARY", {"magnitude": "OTHER", "real": "R", "imaginary": "I"}[data.part]]
        ds.SeriesInstanceUID = uid(*data.identity, data.number, series, data.part, "series")
        ds.SeriesNumber, ds.InstanceNumber = series, instance
        ds.AcquisitionNumber = 1
        ds.BodyPartExamined = "HEAD"
        ds.ScanningSequence = ["SE", "IR"] if ti is not None else "SE"
        ds.SequenceVariant = "NONE"
        ds.ScanOptions = ""
        ds.MRAcquisitionType = "2D"
        ds.SliceThickness = truth.slice_mm
        ds.RepetitionTime = data.tr_ms
        ds.EchoTime = te
        if ti is not None:
            ds.InversionTime = ti
        ds.EchoTrainLength = 1
        ds.EchoNumbers = index + 1 if data.scan.method == "spin-echo-train" else 1
        ds.NumberOfAverages = 1
        ds.FlipAngle = 90
        ds.ReceiveCoilName = truth.scanner.coil
        ds.ImagePositionPatient = corner(truth)
        ds.ImageOrientationPatient = [1, 0, 0, 0, 1, 0]
        ds.PixelSpacing = [round(spacing, 6)] * 2
        step = step_of(frame, truth)
        if truth.scanner.scaling == "slope-per-frame":
            ds.RescaleIntercept, ds.RescaleSlope, ds.RescaleType = 0, f"{step:.8g}", "US"
        elif truth.scanner.scaling == "private-slope":
            ds.RescaleIntercept, ds.RescaleSlope, ds.RescaleType = 0, f"{1.0 + 0.1 * (index % 7):g}", "US"
            put_private_slope(ds, truth, step)
        pixels(ds, data.frames.shape[1:], truth, stored(frame, truth, step).tobytes())
        leave_out(ds, truth)
        paths.append(save(ds, path))
    return paths
