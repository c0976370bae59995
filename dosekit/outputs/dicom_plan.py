"""The settings of a run as a DICOM RT Ion Plan.

The object records how the fields of a run were set so that its dose objects have
something to refer to.  It is no treatment plan: it is unapproved, its intent is
RESEARCH, and its label, name and description say so.

Each range step of a field becomes a pair of control points: the spots with their
weights, then the same spots with weight nought, as the standard's pairs of
segments want it.  A step thickness is a setting of one range shifter of variable
water-equivalent thickness.

What is honest about a meson beam in this object:

- RadiationType is PION.  The standard's terms for it are defined terms, not a
  closed list; PION is not among them and ION would demand a nucleus.
- PrimaryDosimeterUnit is NP: metersets count particles of the beam's main species.
- NominalBeamEnergy is the kinetic energy of one particle in MeV.  (The standard
  says MeV per nucleon, which a meson does not have.)
- A beam without a source point (parallel) has virtual source distances of
  1e6 mm; the field's description says so.

Source of modules: DICOM PS3.3 C.8.8.24 to C.8.8.26.
"""

from __future__ import annotations

import os
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from pydicom.dataset import Dataset
from pydicom.uid import RTIonPlanStorage, RTStructureSetStorage

from dosekit.caution import BANNER
from dosekit.errors import InputError
from dosekit.outputs.dicom_objects import (
    add_frame_of_reference,
    caution_text,
    clip_text,
    number_text,
    object_start,
    reference_item,
    save_object,
    split_moment,
)
from dosekit.outputs.dicom_reference import plan_uid

if TYPE_CHECKING:
    from collections.abc import Sequence

    from numpy.typing import NDArray

    from dosekit.maps.fields import Field
    from dosekit.outputs.dicom_reference import DicomReference

__all__ = ["write_ion_plan"]

PARTICLES_PER_WEIGHT = 1e9
"""Weights of a field count this many particles."""
PARALLEL_DISTANCE_MM = 1e6
"""Stands for an infinite distance."""
MOST_SPOTS = 8000
"""Positions of a control point are two 4-byte floats each in an element of at most 65534 bytes."""
FWHM_PER_SIGMA = 2.0 * float(np.sqrt(2.0 * np.log(2.0)))
RADIATION_TYPES = {"proton": "PROTON", "pi-": "PION", "pi+": "PION", "mu-": "MUON", "mu+": "MUON"}


def write_ion_plan(
    path: str | os.PathLike[str],
    fields: Sequence[Field],
    *,
    reference: DicomReference,
    run_hash: str,
    description: str = "",
    fractions: int = 1,
    created: str = "",
) -> Path:
    """Write the fields of a run as an RT Ion Plan.

    Parameters
    ----------
    path : path
        File to write.
    fields : sequence of Field
        The fields with spots, steps and weights; numbered from 1 in this order.
    reference : DicomReference
        Patient, frame of reference and, when there is one, structure set.
    run_hash : str
        Hash of the run record; the object's identifier is ``plan_uid(run_hash)``.
    description : str
        What the run is; kept after the research-only wording.
    fractions : int
        Number of fractions the weights are for.
    created : str
        ISO moment from the run record, or empty.

    Returns
    -------
    pathlib.Path
        The file written.

    Raises
    ------
    InputError
        If there is no field, weights are not numbers or negative, or all fields give nothing.
    OutputError
        If the file cannot be written.
    """
    if not fields or fractions < 1:
        raise InputError(
            f"{len(fields)} fields in {fractions} fractions", allowed="one field or more, one fraction or more"
        )
    if not any(_particles(field).any() for field in fields):
        raise InputError("fields that give nothing", allowed="at least one weight above nought")
    head = object_start(
        RTIonPlanStorage,
        plan_uid(run_hash),
        modality="RTPLAN",
        reference=reference,
        run_hash=run_hash,
        created=created,
        series_role="RTPLAN",
        series_number=4,
        instance_number=1,
        description="settings",
    )
    head.OperatorsName = ""
    add_frame_of_reference(head, reference)
    head.RTPlanLabel = "RESEARCH ONLY"
    head.RTPlanName = BANNER
    head.RTPlanDescription = clip_text(caution_text(description), "ST")
    head.RTPlanDate, head.RTPlanTime = split_moment(created)
    head.PlanIntent = "RESEARCH"
    head.ApprovalStatus = "UNAPPROVED"
    if reference.structure_set_instance_uid:
        head.RTPlanGeometry = "PATIENT"
        head.ReferencedStructureSetSequence = [
            reference_item(RTStructureSetStorage, reference.structure_set_instance_uid)
        ]
    else:
        head.RTPlanGeometry = "TREATMENT_DEVICE"
    beams = [_beam_item(number, field) for number, field in enumerate(fields, start=1)]
    head.FractionGroupSequence = [_fraction_item(fields, fractions)]
    head.PatientSetupSequence = [_setup_item(reference)]
    head.IonBeamSequence = beams
    return save_object(head, path)


def _fraction_item(fields: Sequence[Field], fractions: int) -> Dataset:
    group = Dataset()
    group.FractionGroupNumber = "1"
    group.NumberOfFractionsPlanned = str(fractions)
    group.NumberOfBeams = str(len(fields))
    group.NumberOfBrachyApplicationSetups = "0"
    group.ReferencedBeamSequence = []
    for number, field in enumerate(fields, start=1):
        beam = Dataset()
        beam.ReferencedBeamNumber = str(number)
        beam.BeamMeterset = number_text(_particles(field).sum() / fractions)
        group.ReferencedBeamSequence.append(beam)
    return group


def _setup_item(reference: DicomReference) -> Dataset:
    setup = Dataset()
    setup.PatientSetupNumber = "1"
    setup.PatientPosition = reference.patient_position
    return setup


def _beam_item(number: int, field: Field) -> Dataset:
    """Return one field."""
    particles = _particles(field)
    steps = [step for step in range(particles.shape[1]) if particles[:, step].any()] or [0]
    beam = Dataset()
    beam.BeamNumber = str(number)
    beam.BeamName = clip_text(field.name or f"field {number}", "LO")
    beam.BeamDescription = clip_text(_description(field), "ST")
    beam.BeamType = "STATIC"
    beam.RadiationType = RADIATION_TYPES.get(str(field.beam.particle), clip_text(str(field.beam.particle), "SH"))
    beam.TreatmentMachineName = "RESEARCH ONLY"
    beam.PrimaryDosimeterUnit = "NP"
    distance_mm = PARALLEL_DISTANCE_MM if field.source_distance_mm is None else float(field.source_distance_mm)
    beam.VirtualSourceAxisDistances = [distance_mm, distance_mm]
    beam.TreatmentDeliveryType = "TREATMENT"
    beam.ScanMode = "MODULATED"
    beam.ModulatedScanModeType = "STATIONARY"
    for name in ("Wedges", "Compensators", "Boli", "Blocks", "LateralSpreadingDevices", "RangeModulators"):
        setattr(beam, f"NumberOf{name}", "0")
    beam.NumberOfRangeShifters = "1"
    beam.RangeShifterSequence = [_shifter_item()]
    beam.PatientSupportType = "TABLE"
    beam.ReferencedPatientSetupNumber = "1"
    beam.FinalCumulativeMetersetWeight = number_text(particles.sum())
    points: list[Dataset] = []
    cumulative = 0.0
    for step in steps:
        lit = np.flatnonzero(particles[:, step])
        lit = lit if lit.size else np.arange(1)  # a field that gives nothing still needs a pair of control points
        for start in range(0, len(lit), MOST_SPOTS):
            chosen = lit[start : start + MOST_SPOTS]
            weights = particles[chosen, step]
            for given in (weights, np.zeros_like(weights)):
                points.append(_point_item(len(points), field, step, chosen, given))
                points[-1].CumulativeMetersetWeight = number_text(cumulative)
                cumulative += float(given.sum())
    _add_setup(points[0], field)
    beam.NumberOfControlPoints = str(len(points))
    beam.IonControlPointSequence = points
    return beam


def _description(field: Field) -> str:
    """Say in words what the tags cannot."""
    beam = field.beam
    words = [
        f"{BANNER}.",
        f"Particle {beam.particle}, {beam.kinetic_energy_mev:.5g} MeV per particle; metersets count particles.",
    ]
    fixed = getattr(beam, "range_shifter", None)
    if isinstance(fixed, tuple):
        words.append(f"{getattr(fixed[0], 'name', fixed[0])}, {fixed[1]:g} mm, is in the beam in every step.")
    if field.source_distance_mm is None:
        words.append(f"Parallel beam: source distance {PARALLEL_DISTANCE_MM:g} mm stands for infinity.")
    return " ".join(words)


def _shifter_item() -> Dataset:
    shifter = Dataset()
    shifter.RangeShifterNumber = "1"
    shifter.RangeShifterID = "variable"
    shifter.RangeShifterType = "ANALOG"
    return shifter


def _point_item(index: int, field: Field, step: int, chosen: NDArray[np.intp], weights: NDArray[Any]) -> Dataset:
    """Return one control point."""
    point = Dataset()
    point.ControlPointIndex = str(index)
    point.NominalBeamEnergy = number_text(field.beam.kinetic_energy_mev)
    point.RangeShifterSettingsSequence = [_setting_item(float(np.asarray(field.shift_mm)[step]))]
    point.ScanSpotTuneID = f"STEP {step + 1}"
    point.NumberOfScanSpotPositions = str(len(chosen))
    positions = np.asarray(field.spots_mm, dtype=np.float32)[chosen]
    point.ScanSpotPositionMap = [float(value) for value in positions.ravel()]
    metersets = [float(value) for value in weights.astype(np.float32)]
    point.ScanSpotMetersetWeights = metersets if len(metersets) > 1 else metersets[0]
    point.ScanningSpotSize = [float(np.float32(sigma * FWHM_PER_SIGMA)) for sigma in _pair(field.beam.spot_sigma_mm)]
    point.NumberOfPaintings = "1"
    return point


def _setting_item(shift_mm: float) -> Dataset:
    setting = Dataset()
    setting.ReferencedRangeShifterNumber = "1"
    setting.RangeShifterSetting = clip_text(f"{shift_mm:.4f} mm water", "LO")
    setting.RangeShifterWaterEquivalentThickness = shift_mm
    return setting


def _add_setup(point: Dataset, field: Field) -> None:
    """Add angles and isocentre, which the first control point holds for all."""
    point.GantryAngle = number_text(float(field.gantry_deg) % 360.0)
    point.GantryRotationDirection = "NONE"
    point.BeamLimitingDeviceAngle = "0"
    point.BeamLimitingDeviceRotationDirection = "NONE"
    point.PatientSupportAngle = number_text(float(field.couch_deg) % 360.0)
    point.PatientSupportRotationDirection = "NONE"
    point.TableTopPitchAngle = 0.0
    point.TableTopPitchRotationDirection = "NONE"
    point.TableTopRollAngle = 0.0
    point.TableTopRollRotationDirection = "NONE"
    point.TableTopVerticalPosition = ""
    point.TableTopLongitudinalPosition = ""
    point.TableTopLateralPosition = ""
    point.IsocenterPosition = [number_text(value) for value in field.isocentre_mm]


def _particles(field: Field) -> NDArray[np.float64]:
    """Return particles for each spot and step, checked."""
    weights = np.asarray(field.weights, dtype=np.float64)
    spots = np.asarray(field.spots_mm, dtype=np.float64)
    shifts = np.asarray(field.shift_mm, dtype=np.float64)
    if spots.ndim != 2 or spots.shape[1] != 2 or weights.shape != (len(spots), len(shifts)):
        raise InputError(
            f"field {field.name!r} with weights of shape {weights.shape}",
            allowed=f"({len(spots)}, {len(shifts)}), the numbers of spots and steps",
        )
    if not np.all(np.isfinite(weights)) or weights.size == 0 or weights.min() < 0.0:
        raise InputError(f"weights of field {field.name!r}", allowed="finite and not negative, at least one")
    return weights * PARTICLES_PER_WEIGHT


def _pair(value: Any) -> tuple[float, float]:
    """Return a value for x and y given once or twice."""
    both = np.broadcast_to(np.asarray(value, dtype=np.float64), (2,))
    return float(both[0]), float(both[1])
