"""Classic MR Image files, one per frame (DICOM PS3.3 A.4): a series per time, or one series per scan."""

from __future__ import annotations

from datetime import timedelta
from pathlib import Path

from pydicom.uid import MRImageStorage

from qa.simulate.header import COUNTS, ScanData, corner, describe, pixels, put, save, start, stored, uid
from qa.simulate.truth import RunTruth


def write(folder: Path, truth: RunTruth, data: ScanData, study: str, *, series_per_time: bool) -> list[Path]:
    """Write one scan. With `series_per_time`, every inversion time and every separate echo-time scan has its own."""
    separate = series_per_time and data.scan.method != "spin-echo-train"
    paths = []
    for index, frame in enumerate(data.frames):
        ti, te = data.ti_ms[index], data.te_ms[index]
        time = f"TI{ti:g}" if ti is not None else f"TE{te:g}"
        series = 100 * data.number + (index + 1 if separate else 0)
        instance = 1 if separate else index + 1
        path = folder / f"{data.number:02d}" / f"{time}.dcm"
        identity = (*data.identity, data.number, index)
        ds = start(path, MRImageStorage, uid(*identity, "image"), truth, uid(study))
        ds.StudyInstanceUID = study
        put(ds, describe(data, time if separate else ""))
        moment = truth.acquired + timedelta(minutes=4 * data.number, seconds=2 * index if separate else 0)
        ds.AcquisitionDate, ds.AcquisitionTime = moment.strftime("%Y%m%d"), moment.strftime("%H%M%S")
        spacing = truth.field_of_view_mm / truth.matrix
        ds.ImageType = ["ORIGINAL", "PRIMARY", "R" if truth.signed else "OTHER"]
        ds.SeriesInstanceUID = uid(*data.identity, data.number, series, "series")
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
        step = 1.0
        if truth.scanner.scaling == "slope-per-frame":  # each frame stretched to its own maximum
            step = max(float(abs(frame).max()) * COUNTS / 30000.0, 1e-6)
            ds.RescaleIntercept, ds.RescaleSlope, ds.RescaleType = 0, f"{step:.8g}", "US"
            step = float(ds.RescaleSlope)
        pixels(ds, data.frames.shape[1:], truth, stored(frame, truth, step).tobytes())
        paths.append(save(ds, path))
    return paths
