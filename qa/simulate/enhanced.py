"""Enhanced MR Image files, one per scan with a frame per time (DICOM PS3.3 A.36)."""

from __future__ import annotations

from datetime import timedelta
from pathlib import Path

from pydicom.dataset import Dataset
from pydicom.sequence import Sequence
from pydicom.uid import EnhancedMRImageStorage

from qa.simulate.header import ScanData, corner, describe, leave_out, pixels, put, save, start, step_of, stored, uid
from qa.simulate.truth import RunTruth

_PROTON_MHZ_PER_T = 42.577478518  # CODATA 2018, shielded value differs by 26 ppm


def _item(**values: object) -> Sequence:
    item = Dataset()
    for keyword, value in values.items():
        setattr(item, keyword, value)
    return Sequence([item])


def _code(value: str, scheme: str, meaning: str) -> Sequence:
    return _item(CodeValue=value, CodingSchemeDesignator=scheme, CodeMeaning=meaning)


def write(folder: Path, truth: RunTruth, data: ScanData, study: str) -> list[Path]:
    """Write one scan as one file."""
    kind = f"-{data.part}" if truth.written == "real-imaginary" else ""
    path = folder / f"{data.number:02d}{kind}.dcm"
    identity = (*data.identity, data.number, data.part)
    ds = start(path, EnhancedMRImageStorage, uid(*identity, "image"), truth, uid(study))
    ds.StudyInstanceUID = study
    put(ds, describe(data, ""))
    ds.SeriesInstanceUID = uid(*identity, "series")
    ds.SeriesNumber, ds.InstanceNumber = 100 * data.number + (50 if data.part == "imaginary" else 0), 1
    moment = truth.acquired + timedelta(minutes=4 * data.number)
    ds.AcquisitionDateTime = moment.strftime("%Y%m%d%H%M%S.000000%z")
    ds.AcquisitionDuration = 240.0
    ds.AcquisitionNumber = 1
    inverted = any(ti is not None for ti in data.ti_ms) and data.scan.method == "inversion-recovery"
    contrast = "T1" if data.scan.quantity == "T1" else "T2"
    component = data.part.upper()
    ds.ImageType = ["ORIGINAL", "PRIMARY", contrast, "NONE"]
    _sequence(ds, truth, data, contrast, component)
    count, rows, columns = data.frames.shape
    steps = [step_of(frame, truth) for frame in data.frames]
    ds.NumberOfFrames = count
    ds.SharedFunctionalGroupsSequence = Sequence([_shared(truth, data, contrast, component)])
    ds.PerFrameFunctionalGroupsSequence = Sequence(
        [_frame(truth, data, index, inverted, steps[index]) for index in range(count)]
    )
    dimension = uid(*identity, "dimension")
    ds.DimensionOrganizationSequence = _item(DimensionOrganizationUID=dimension)
    ds.DimensionIndexSequence = _item(
        DimensionOrganizationUID=dimension, DimensionIndexPointer=0x00209128, FunctionalGroupPointer=0x00209111
    )
    ds.AcquisitionContextSequence = Sequence([])
    pieces = [stored(frame, truth, step).tobytes() for frame, step in zip(data.frames, steps, strict=True)]
    pixels(ds, (rows, columns), truth, b"".join(pieces))
    leave_out(ds, truth)
    return [save(ds, path)]


def _sequence(ds: Dataset, truth: RunTruth, data: ScanData, contrast: str, component: str) -> None:
    ds.ResonantNucleus = "1H"
    ds.KSpaceFiltering = "NONE" if truth.scanner.filtering == 0 else "HAMMING"
    ds.ApplicableSafetyStandardAgency = "IEC"
    ds.ContentQualification = "RESEARCH"
    ds.PulseSequenceName = "se_multi" if data.scan.method == "spin-echo-train" else "se"
    ds.MRAcquisitionType = "2D"
    ds.EchoPulseSequence = "SPIN"
    ds.MultipleSpinEcho = "YES" if data.scan.method == "spin-echo-train" else "NO"
    ds.MultiPlanarExcitation = "NO"
    ds.PhaseContrast = "NO"
    ds.TimeOfFlightContrast = "NO"
    ds.SteadyStatePulseSequence = "NONE"
    ds.EchoPlanarPulseSequence = "NO"
    ds.SaturationRecovery = "YES" if data.scan.method == "saturation-recovery" else "NO"
    ds.SpectrallySelectedSuppression = "NONE"
    ds.OversamplingPhase = "NONE"
    ds.GeometryOfKSpaceTraversal = "RECTILINEAR"
    ds.SegmentedKSpaceTraversal = "SINGLE"
    ds.RectilinearPhaseEncodeReordering = "LINEAR"
    ds.NumberOfKSpaceTrajectories = 1
    ds.PixelPresentation = "MONOCHROME"
    ds.VolumetricProperties = "VOLUME"
    ds.VolumeBasedCalculationTechnique = "NONE"
    ds.ComplexImageComponent = component
    ds.AcquisitionContrast = contrast
    ds.PresentationLUTShape = "IDENTITY"
    ds.BurnedInAnnotation = "NO"
    ds.LossyImageCompression = "00"


def _shared(truth: RunTruth, data: ScanData, contrast: str, component: str) -> Dataset:
    shared = Dataset()
    spacing = round(truth.field_of_view_mm / truth.matrix, 6)
    frequency = truth.scanner.field_t * _PROTON_MHZ_PER_T
    shared.PixelMeasuresSequence = _item(PixelSpacing=[spacing, spacing], SliceThickness=truth.slice_mm)
    shared.PlaneOrientationSequence = _item(ImageOrientationPatient=[1, 0, 0, 0, 1, 0])
    shared.FrameAnatomySequence = _item(FrameLaterality="U", AnatomicRegionSequence=_code("69536005", "SCT", "Head"))
    if truth.scanner.scaling == "counts":
        shared.PixelValueTransformationSequence = _item(RescaleIntercept=0, RescaleSlope=1, RescaleType="US")
    timing = Dataset()
    timing.RepetitionTime = data.tr_ms
    timing.FlipAngle = 90
    timing.EchoTrainLength = 1
    timing.RFEchoTrainLength = len(data.te_ms) if data.scan.method == "spin-echo-train" else 1
    timing.GradientEchoTrainLength = 0
    timing.SpecificAbsorptionRateSequence = _item(
        SpecificAbsorptionRateDefinition="IEC_HEAD", SpecificAbsorptionRateValue=0.4
    )
    timing.GradientOutputType = "DB_DT"
    timing.GradientOutput = 20.0
    timing.OperatingModeSequence = Sequence(
        [_item(OperatingModeType=kind, OperatingMode="IEC_NORMAL")[0] for kind in ("STATIC FIELD", "RF", "GRADIENT")]
    )
    shared.MRTimingAndRelatedParametersSequence = Sequence([timing])
    shared.MRFOVGeometrySequence = _item(
        InPlanePhaseEncodingDirection="ROW",
        MRAcquisitionFrequencyEncodingSteps=truth.matrix,
        MRAcquisitionPhaseEncodingStepsInPlane=truth.matrix,
        PercentSampling=100,
        PercentPhaseFieldOfView=100,
    )
    shared.MRImagingModifierSequence = _item(
        MagnetizationTransfer="NONE",
        BloodSignalNulling="NO",
        Tagging="NONE",
        TransmitterFrequency=frequency,
        PixelBandwidth=200.0,
    )
    shared.MRReceiveCoilSequence = _item(
        ReceiveCoilName=truth.scanner.coil,
        ReceiveCoilManufacturerName="",
        ReceiveCoilType="VOLUME",
        QuadratureReceiveCoil="YES",
    )
    shared.MRTransmitCoilSequence = _item(
        TransmitCoilName="BODY", TransmitCoilManufacturerName="", TransmitCoilType="BODY"
    )
    shared.MRAveragesSequence = _item(NumberOfAverages=1)
    shared.MRImageFrameTypeSequence = _item(
        FrameType=["ORIGINAL", "PRIMARY", contrast, "NONE"],
        PixelPresentation="MONOCHROME",
        VolumetricProperties="VOLUME",
        VolumeBasedCalculationTechnique="NONE",
        ComplexImageComponent=component,
        AcquisitionContrast=contrast,
    )
    return shared


def _frame(truth: RunTruth, data: ScanData, index: int, inverted: bool, step: float) -> Dataset:
    frame = Dataset()
    frame.FrameContentSequence = _item(
        FrameAcquisitionNumber=1,
        StackID="1",
        InStackPositionNumber=1,
        TemporalPositionIndex=index + 1,
        DimensionIndexValues=[index + 1],
        FrameReferenceDateTime=truth.acquired.strftime("%Y%m%d%H%M%S.000000%z"),
        FrameAcquisitionDateTime=truth.acquired.strftime("%Y%m%d%H%M%S.000000%z"),
        FrameAcquisitionDuration=10.0,
    )
    frame.PlanePositionSequence = _item(ImagePositionPatient=corner(truth))
    frame.MREchoSequence = _item(EffectiveEchoTime=float(data.te_ms[index]))
    modifier = Dataset()
    modifier.InversionRecovery = "YES" if inverted else "NO"
    if inverted:
        modifier.InversionTimes = [float(data.ti_ms[index] or 0.0)]
    modifier.FlowCompensation = "NONE"
    modifier.Spoiling = "NONE"
    modifier.T2Preparation = "NO"
    modifier.SpectrallySelectedExcitation = "NONE"
    modifier.SpatialPresaturation = "NONE"
    modifier.PartialFourier = "NO"
    modifier.ParallelAcquisition = "NO"
    frame.MRModifierSequence = Sequence([modifier])
    if truth.scanner.scaling != "counts":
        frame.PixelValueTransformationSequence = _item(RescaleIntercept=0, RescaleSlope=f"{step:.8g}", RescaleType="US")
    return frame
