"""RT Ion Plan: valid, unapproved, research only, settings as they were."""

from __future__ import annotations

from dataclasses import dataclass
from types import SimpleNamespace

import numpy as np
import pydicom
import pytest

from dosekit.errors import InputError
from dosekit.outputs.dicom_plan import write_ion_plan
from dosekit.outputs.dicom_reference import invented_reference, plan_uid, structure_set_uid

from dicom_judges import RESEARCH_ONLY, check_house_rules, judge

RUN = "3c" * 32


@dataclass
class Setting:
    """As much of a field as the plan needs."""

    name: str
    beam: object
    isocentre_mm: tuple
    gantry_deg: float
    couch_deg: float
    spots_mm: np.ndarray
    shift_mm: np.ndarray
    weights: np.ndarray
    source_distance_mm: float | None = None


def setting(name="left", *, spots=7, steps=4, particle="pi-", seed=1, **changes):
    rng = np.random.default_rng(seed)
    weights = rng.random((spots, steps))
    weights[rng.random(weights.shape) < 0.2] = 0.0
    beam = SimpleNamespace(particle=particle, kinetic_energy_mev=81.66, spot_sigma_mm=5.0)
    return Setting(
        **{
            "name": name,
            "beam": beam,
            "isocentre_mm": (1.5, -2.25, 30.0),
            "gantry_deg": 270.0,
            "couch_deg": 0.0,
            "spots_mm": rng.normal(size=(spots, 2)) * 20.0,
            "shift_mm": np.arange(steps) * 3.3,
            "weights": weights,
            **changes,
        }
    )


def write(folder, fields, *, structures=True, **options):
    reference = invented_reference(RUN).with_structure_set(structure_set_uid(RUN) if structures else None)
    return write_ion_plan(folder / "plan.dcm", fields, reference=reference, run_hash=RUN, **options)


@pytest.mark.parametrize("structures", [True, False])
@pytest.mark.parametrize("particle", ["pi-", "pi+", "proton", "mu-"])
def test_judges_accept(tmp_path, structures, particle):
    fields = [setting(particle=particle), setting("right", gantry_deg=-90.0, source_distance_mm=2000.0, couch_deg=15)]
    path = write(tmp_path, fields, structures=structures, created="2026-02-03")
    judge(path)
    head = check_house_rules(path)
    assert head.SOPInstanceUID == plan_uid(RUN)
    assert head.ApprovalStatus == "UNAPPROVED"
    assert head.PlanIntent == "RESEARCH"
    assert head.RTPlanLabel == "RESEARCH ONLY"
    assert RESEARCH_ONLY in head.RTPlanDescription
    assert RESEARCH_ONLY in head.RTPlanName


def test_judges_accept_one_spot_and_one_step(tmp_path):
    judge(write(tmp_path, [setting(spots=1, steps=1, weights=np.ones((1, 1)))]))


def test_radiation_type_is_honest(tmp_path):
    beam = pydicom.dcmread(write(tmp_path, [setting()])).IonBeamSequence[0]
    assert beam.RadiationType == "PION"
    assert "RadiationMassNumber" not in beam
    assert beam.PrimaryDosimeterUnit == "NP"
    assert "infinity" in beam.BeamDescription


def test_settings_come_back(tmp_path):
    field = setting(gantry_deg=-90.0, couch_deg=350.0)
    beam = pydicom.dcmread(write(tmp_path, [field])).IonBeamSequence[0]
    points = beam.IonControlPointSequence
    assert float(points[0].GantryAngle) == 270.0
    assert float(points[0].PatientSupportAngle) == 350.0
    assert [float(value) for value in points[0].IsocenterPosition] == [1.5, -2.25, 30.0]
    found = np.zeros_like(field.weights)
    for point in points[::2]:
        shift = point.RangeShifterSettingsSequence[0].RangeShifterWaterEquivalentThickness
        step = int(np.abs(field.shift_mm - shift).argmin())
        assert shift == pytest.approx(field.shift_mm[step], abs=1e-5)
        positions = np.array(point.ScanSpotPositionMap).reshape(-1, 2)
        for position, weight in zip(positions, np.atleast_1d(point.ScanSpotMetersetWeights), strict=True):
            spot = int(np.hypot(*(field.spots_mm - position).T).argmin())
            found[spot, step] += weight / 1e9
    assert found == pytest.approx(field.weights, rel=1e-6)


def test_metersets_add_up(tmp_path):
    fields = [setting(), setting("right", seed=2)]
    head = pydicom.dcmread(write(tmp_path, fields, fractions=5))
    group = head.FractionGroupSequence[0]
    assert group.NumberOfFractionsPlanned == 5
    for field, given, beam in zip(fields, group.ReferencedBeamSequence, head.IonBeamSequence, strict=True):
        particles = field.weights.sum() * 1e9
        assert float(given.BeamMeterset) * 5 == pytest.approx(particles, rel=1e-9)
        assert float(beam.FinalCumulativeMetersetWeight) == pytest.approx(particles, rel=1e-9)
        cumulative = [float(point.CumulativeMetersetWeight) for point in beam.IonControlPointSequence]
        assert cumulative[0] == 0.0
        assert np.all(np.diff(cumulative) >= 0.0)
        assert cumulative[-1] == pytest.approx(particles, rel=1e-9)
        for first, second in zip(beam.IonControlPointSequence[::2], beam.IonControlPointSequence[1::2], strict=True):
            step = np.sum(first.ScanSpotMetersetWeights)
            total = float(second.CumulativeMetersetWeight) - float(first.CumulativeMetersetWeight)
            assert step == pytest.approx(total, rel=1e-5)
            assert not np.any(second.ScanSpotMetersetWeights)
        assert [point.ControlPointIndex for point in beam.IonControlPointSequence] == list(range(len(cumulative)))
        assert beam.NumberOfControlPoints == len(cumulative)


def test_very_many_spots_are_split(tmp_path):
    path = write(tmp_path, [setting(spots=9001, steps=1, weights=np.ones((9001, 1)))])
    judge(path)
    points = pydicom.dcmread(path).IonBeamSequence[0].IonControlPointSequence
    assert [point.NumberOfScanSpotPositions for point in points] == [8000, 8000, 1001, 1001]


def test_same_run_same_bytes(tmp_path):
    assert write(tmp_path, [setting()]).read_bytes() == write(tmp_path, [setting()]).read_bytes()


@pytest.mark.parametrize(
    "field",
    [
        setting(weights=np.full((7, 4), np.nan)),
        setting(weights=-np.ones((7, 4))),
        setting(weights=np.ones((4, 7))),
    ],
)
def test_weights_that_cannot_be_are_refused(tmp_path, field):
    with pytest.raises(InputError, match="left"):
        write(tmp_path, [field])
    assert list(tmp_path.iterdir()) == []


def test_a_field_that_gives_nothing_is_kept(tmp_path):
    path = write(tmp_path, [setting(), setting("right", weights=np.zeros((7, 4)))])
    judge(path)
    head = pydicom.dcmread(path)
    assert [float(beam.FinalCumulativeMetersetWeight) > 0.0 for beam in head.IonBeamSequence] == [True, False]
    assert head.IonBeamSequence[1].NumberOfControlPoints == 2
    with pytest.raises(InputError, match="give nothing"):
        write(tmp_path, [setting(weights=np.zeros((7, 4)))])


def test_no_field_is_refused(tmp_path):
    with pytest.raises(InputError, match="0 fields"):
        write(tmp_path, [])
