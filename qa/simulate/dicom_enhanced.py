"""A digital scan as one Enhanced MR object: every slice a frame, with functional groups (PS3.3, A.36 and C.8.13)."""

import math
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from qa.simulate.acquire import uid
from qa.simulate.dicom_out import add_pixels, decimals, shared_dataset
from qa.simulate.setup import Setup

if TYPE_CHECKING:
    from pydicom.dataset import Dataset

__all__ = ["enhanced_dataset"]

_ENHANCED_MR = "1.2.840.10008.5.1.4.1.1.4.1"
_FRAME_CONTENT = 0x00209111
_PLANE_POSITION = 0x00209113
_DIMENSIONS = ((0x00209056, _FRAME_CONTENT, "Stack ID"), (0x00209057, _FRAME_CONTENT, "In-Stack Position Number"))


def enhanced_dataset(setup: Setup, repeat: int, stack: NDArray[np.float32]) -> "Dataset":
    """Describe one repeat as a multi-frame object.

    Parameters
    ----------
    setup : Setup
        The scan.
    repeat : int
        Counted from 0.
    stack : (S, R, C) float32
        Its images, whole numbers.

    Returns
    -------
    pydicom.dataset.Dataset
        Without file meta information.
    """
    ds = shared_dataset(setup, repeat, _ENHANCED_MR, uid(setup, "multi-frame image", repeat))
    ds.InstanceNumber = 1
    ds.NumberOfFrames = setup.slices
    add_pixels(ds, setup, stack)
    _describe_image(ds, setup, repeat)
    _describe_sequence(ds, setup)
    _describe_dimensions(ds, setup)
    ds.SharedFunctionalGroupsSequence = [_shared_groups(setup)]
    ds.PerFrameFunctionalGroupsSequence = [_frame_groups(setup, repeat, index) for index in range(setup.slices)]
    ds.AcquisitionContextSequence = []
    return ds


def _item(**values: Any) -> "Dataset":  # noqa: ANN401 - any attribute's value
    from pydicom.dataset import Dataset

    item = Dataset()
    for keyword, value in values.items():
        setattr(item, keyword, value)
    return item


_NATURE = {
    "PixelPresentation": "MONOCHROME",
    "VolumetricProperties": "VOLUME",
    "VolumeBasedCalculationTechnique": "NONE",
    "ComplexImageComponent": "MAGNITUDE",
    "AcquisitionContrast": "T1",
}


def _describe_image(ds: "Dataset", setup: Setup, repeat: int) -> None:
    """Add the Enhanced MR Image module (C.8.13.1)."""
    ds.ImageType = ["ORIGINAL", "PRIMARY", "T1", "NONE"]
    for keyword, value in _NATURE.items():
        setattr(ds, keyword, value)
    ds.AcquisitionNumber = repeat + 1
    ds.AcquisitionDateTime = setup.started(repeat).strftime("%Y%m%d%H%M%S")
    ds.AcquisitionDuration = setup.repeat_seconds
    ds.ContentQualification = "SERVICE"
    ds.ResonantNucleus = "1H"
    ds.KSpaceFiltering = "NONE" if setup.apodisation == "none" else "HANNING"
    ds.MagneticFieldStrength = setup.field_strength_T
    ds.ApplicableSafetyStandardAgency = "IEC"
    ds.BurnedInAnnotation = "NO"
    ds.LossyImageCompression = "00"
    ds.PresentationLUTShape = "IDENTITY"
    del ds.AcquisitionDate, ds.AcquisitionTime


def _describe_sequence(ds: "Dataset", setup: Setup) -> None:
    """Add the MR Pulse Sequence module (C.8.13.4)."""
    spin = setup.sequence == "SE"
    ds.PulseSequenceName = setup.sequence
    ds.MRAcquisitionType = "2D"
    ds.EchoPulseSequence = "SPIN" if spin else "GRADIENT"
    if spin:
        ds.MultipleSpinEcho = "NO"
    ds.MultiPlanarExcitation = "NO"
    ds.PhaseContrast = "NO"
    ds.TimeOfFlightContrast = "NO"
    ds.SteadyStatePulseSequence = "NONE"
    ds.EchoPlanarPulseSequence = "NO"
    ds.SaturationRecovery = "NO"
    ds.SpectrallySelectedSuppression = "NONE"
    ds.OversamplingPhase = "NONE"
    ds.GeometryOfKSpaceTraversal = "RECTILINEAR"
    ds.RectilinearPhaseEncodeReordering = "LINEAR"
    ds.SegmentedKSpaceTraversal = "SINGLE"
    ds.NumberOfKSpaceTrajectories = 1


def _describe_dimensions(ds: "Dataset", setup: Setup) -> None:
    """Add the Multi-frame Dimension module (C.7.6.17): one stack of slices."""
    organisation = uid(setup, "dimensions")
    ds.DimensionOrganizationSequence = [_item(DimensionOrganizationUID=organisation)]
    ds.DimensionIndexSequence = [
        _item(
            DimensionOrganizationUID=organisation,
            DimensionIndexPointer=pointer,
            FunctionalGroupPointer=group,
            DimensionDescriptionLabel=label,
        )
        for pointer, group, label in _DIMENSIONS
    ]


def _shared_groups(setup: Setup) -> "Dataset":
    """Describe what all frames have in common (C.7.6.16.2 and C.8.13.5)."""
    spacing = setup.thickness_mm if setup.spacing_mm is None else setup.spacing_mm
    lines = setup.phase_encode == "column"
    rows, columns = (math.ceil(n * setup.acquired_fraction) for n in setup.matrix)
    measures = _item(
        PixelSpacing=decimals(setup.pixel_mm),
        SliceThickness=decimals([setup.thickness_mm])[0],
        SpacingBetweenSlices=decimals([spacing])[0],
    )
    timing = _item(
        RepetitionTime=decimals([setup.repetition_ms])[0],
        FlipAngle=decimals([setup.flip_deg])[0],
        EchoTrainLength=1,
        RFEchoTrainLength=1 if setup.sequence == "SE" else 0,
        GradientEchoTrainLength=0 if setup.sequence == "SE" else 1,
        GradientOutputType="DB_DT",
        GradientOutput=0.0,
        SpecificAbsorptionRateSequence=[_item(SpecificAbsorptionRateDefinition="IEC_HEAD", SpecificAbsorptionRateValue=0.0)],
        OperatingModeSequence=[
            _item(OperatingModeType=kind, OperatingMode="IEC_NORMAL") for kind in ("STATIC FIELD", "RF", "GRADIENT")
        ],
    )
    field = _item(
        InPlanePhaseEncodingDirection="COLUMN" if lines else "ROW",
        MRAcquisitionFrequencyEncodingSteps=columns if lines else rows,
        MRAcquisitionPhaseEncodingStepsInPlane=rows if lines else columns,
        PercentSampling=decimals([100 * setup.acquired_fraction * setup.partial_fourier])[0],
        PercentPhaseFieldOfView="100",
    )
    modifier = _item(
        InversionRecovery="NO",
        FlowCompensation="NONE",
        Spoiling="NONE" if setup.sequence == "SE" else "RF",
        T2Preparation="NO",
        SpectrallySelectedExcitation="NONE",
        SpatialPresaturation="NONE",
        PartialFourier="YES" if setup.partial_fourier < 1 else "NO",
        ParallelAcquisition="NO",
    )
    if setup.partial_fourier < 1:
        modifier.PartialFourierDirection = "PHASE"
    imaging = _item(
        MagnetizationTransfer="NONE",
        BloodSignalNulling="NO",
        Tagging="NONE",
        TransmitterFrequency=setup.frequency_MHz,
        PixelBandwidth=decimals([setup.bandwidth_hz_per_pixel])[0],
    )
    receive = _item(
        ReceiveCoilName=setup.receive_coil,
        ReceiveCoilManufacturerName="",
        ReceiveCoilType="VOLUME" if setup.channels == 1 else "MULTICOIL",
        QuadratureReceiveCoil="YES",
    )
    if setup.channels > 1:
        receive.MultiCoilDefinitionSequence = [
            _item(MultiCoilElementName=str(k + 1), MultiCoilElementUsed="YES") for k in range(setup.channels)
        ]
    transmit = _item(TransmitCoilName="BODY", TransmitCoilManufacturerName="", TransmitCoilType="BODY")
    orientation = decimals([*setup.row_direction, *setup.column_direction])
    return _item(
        PixelMeasuresSequence=[measures],
        PlaneOrientationSequence=[_item(ImageOrientationPatient=orientation)],
        FrameVOILUTSequence=[_item(WindowCenter=decimals([setup.level / 2])[0], WindowWidth=decimals([setup.level])[0])],
        PixelValueTransformationSequence=[_item(RescaleIntercept="0", RescaleSlope="1", RescaleType="US")],
        MRImageFrameTypeSequence=[_item(FrameType=["ORIGINAL", "PRIMARY", "T1", "NONE"], **_NATURE)],
        MRTimingAndRelatedParametersSequence=[timing],
        MRFOVGeometrySequence=[field],
        MREchoSequence=[_item(EffectiveEchoTime=setup.echo_ms)],
        MRModifierSequence=[modifier],
        MRImagingModifierSequence=[imaging],
        MRReceiveCoilSequence=[receive],
        MRTransmitCoilSequence=[transmit],
        MRAveragesSequence=[_item(NumberOfAverages=setup.averages)],
        FrameAnatomySequence=[_item(FrameLaterality="U", AnatomicRegionSequence=[_phantom_region()])],
    )


def _phantom_region() -> "Dataset":
    return _item(CodeValue="113681", CodingSchemeDesignator="DCM", CodeMeaning="Phantom")


def _frame_groups(setup: Setup, repeat: int, index: int) -> "Dataset":
    """Describe what is one frame's own."""
    began = setup.started(repeat).strftime("%Y%m%d%H%M%S")
    content = _item(
        FrameAcquisitionNumber=repeat + 1,
        FrameReferenceDateTime=began,
        FrameAcquisitionDateTime=began,
        FrameAcquisitionDuration=setup.repeat_seconds * 1000,
        StackID="1",
        InStackPositionNumber=index + 1,
        TemporalPositionIndex=1,
        DimensionIndexValues=[1, index + 1],
    )
    position = _item(ImagePositionPatient=decimals(setup.planes[index].position_patient))
    return _item(FrameContentSequence=[content], PlanePositionSequence=[position])
