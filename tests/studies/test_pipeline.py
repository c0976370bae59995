"""A whole study: what is in the folder, whether it hangs together, and that it repeats bit for bit."""

from __future__ import annotations

import json
import warnings

import numpy as np
import pytest

from dosekit.basis.components import COMPONENTS, STAR_COMPONENTS
from dosekit.caution import BANNER
from dosekit.errors import DosekitWarning, GridError, ReachError, StudyError, UnknownNameError
from dosekit.studies.model import parse_study
from dosekit.studies.pipeline import compute, run


def test_the_folder_holds_everything(finished):
    folder, result = finished
    names = {path.relative_to(folder).as_posix() for path in folder.rglob("*") if path.is_file()}
    expected = {
        "dose.nc", "settings.csv", "spots.csv", "measures.csv", "measures_effect.csv", "components.csv", "energy.csv",
        "histograms.csv", "summary.txt",
        "report.html", "record.json", "dicom/rt_dose_total.dcm", "dicom/rt_dose_effective.dcm",
        "dicom/rt_dose_field_front.dcm", "dicom/rt_dose_field_left.dcm", "dicom/rt_ion_plan.dcm",
        "dicom/rt_structure_set.dcm", "dicom/volume/ct_0001.dcm", "figures/slices.pdf", "figures/slices.png",
        "figures/histograms.pdf", "figures/quality.pdf", "figures/depth_front.png", "figures/range_steps_left.pdf",
    }  # fmt: skip
    assert expected <= names
    assert BANNER in result.line


def test_every_text_output_says_research_only(finished):
    folder, _ = finished
    texts = [path for path in folder.rglob("*") if path.suffix in (".csv", ".txt", ".html", ".json")]
    assert len(texts) >= 8
    for path in texts:
        assert "RESEARCH ONLY" in path.read_text(encoding="utf-8"), path.name


def test_energy_of_each_component_is_accounted_for(finished):
    _, result = finished
    rows, totals = result.summary.energy_by_component, result.summary.energy_balance
    mass_kg = result.grid.density_g_cm3.astype(np.float64) * 4.0**3 * 1e-6
    for row, name in enumerate(COMPONENTS):
        expected = float(np.sum(result.dose["dose"].values[row] * mass_kg))
        assert rows[name]["deposited_j"] == pytest.approx(expected, rel=1e-5), name
    for name in STAR_COMPONENTS:
        parts = rows[name]
        out = parts["deposited_j"] + parts["bound_j"] + parts["escaped_j"]
        assert out == pytest.approx(parts["emitted_j"], rel=1e-9)
        assert parts["escaped_j"] > -1e-6 * parts["emitted_j"]
    assert rows["star_neutron"]["escaped_j"] > rows["star_light"]["escaped_j"]
    # 139.57 MeV for each stop
    stops = float(result.dose["stops"].values.sum(dtype=np.float64)) * 4.0**3
    given = sum(rows[name]["emitted_j"] for name in (*STAR_COMPONENTS, "binding"))
    assert given == pytest.approx(stops * 139.57039 * 1.602176634e-13, rel=1e-3)
    assert totals["total_inside_j"] < totals["beams_kinetic_j"] + totals["stars_emitted_j"]


def test_the_mean_target_dose_is_the_prescribed_one(finished):
    _, result = finished
    assert result.histograms[result.target].mean_gy == pytest.approx(1.5, rel=1e-5)


def test_fields_add_up_to_the_total(finished):
    _, result = finished
    total = sum(dataset["dose"].values.astype(np.float64) for dataset in result.per_field.values())
    np.testing.assert_allclose(result.dose["dose"].values, total, rtol=1e-5, atol=1e-7)


def test_components_are_apart_and_finite(finished):
    _, result = finished
    dose = result.dose["dose"]
    assert tuple(dose["component"].values) == COMPONENTS
    assert np.isfinite(dose.values).all()
    for name in (*STAR_COMPONENTS, "primary", "in_flight", "decay", "contaminant_muon", "contaminant_electron"):
        assert float(dose.sel(component=name).max()) > 0.0, name


def test_star_share_is_that_of_the_maps(finished):
    _, result = finished
    coverage = result.grid.structure(result.target)
    values = result.dose["dose"].values.astype(np.float64) * coverage
    stars = sum(values[COMPONENTS.index(name)].sum() for name in STAR_COMPONENTS)
    assert result.summary.star_share == pytest.approx(stars / values.sum(), rel=1e-5)
    assert 0.15 < result.summary.star_share < 0.6


def test_rt_dose_holds_the_same_dose(finished):
    import pydicom

    folder, result = finished
    head = pydicom.dcmread(folder / "dicom" / "rt_dose_total.dcm")
    stored = head.pixel_array * float(head.DoseGridScaling)
    ours = result.dose["dose"].sum("component").values
    np.testing.assert_allclose(stored, np.maximum(ours, 0.0), atol=0.51 * float(head.DoseGridScaling))
    assert head.ReferencedRTPlanSequence[0].ReferencedSOPInstanceUID == str(
        pydicom.dcmread(folder / "dicom" / "rt_ion_plan.dcm").SOPInstanceUID
    )


def test_netcdf_reads_back(finished):
    from dosekit.outputs.netcdf import read_dataset

    folder, result = finished
    back = read_dataset(folder / "dose.nc")
    np.testing.assert_array_equal(back["dose"].values, result.dose["dose"].values)
    assert "effect_dose" in back
    assert "RESEARCH ONLY" in back.attrs["caution"]


def test_settings_add_up_to_the_particles(finished):
    folder, result = finished
    lines = [line for line in (folder / "settings.csv").read_text().splitlines() if not line.startswith("#")]
    column = lines[0].split(",").index("particles")
    particles = sum(float(line.split(",")[column]) for line in lines[1:])
    assert particles == pytest.approx(sum(plan.field.particles for plan in result.planned), rel=1e-5)


def test_dose_is_flat_along_each_field(finished):
    _, result = finished
    for plan in result.planned:
        assert plan.settings.flatness < 0.03


@pytest.mark.slow
def test_a_run_repeats_bit_for_bit(finished, tmp_path):
    from dosekit.studies.repeating import repeat

    folder, _ = finished
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", DosekitWarning)
        outcome = repeat(folder / "record.json", tmp_path / "again", beside=tmp_path)
    assert outcome.different == ()
    assert len(outcome.same) > 20
    assert (folder / "record.json").read_bytes() == (tmp_path / "again" / "record.json").read_bytes()


def test_the_record_names_every_output_with_its_hash(finished):
    from dosekit.outputs.files import sha256_of_file

    folder, _ = finished
    record = json.loads((folder / "record.json").read_text(encoding="utf-8"))
    for name, digest in record["outputs"].items():
        assert sha256_of_file(folder / name) == digest


@pytest.mark.parametrize(
    ("change", "error", "words"),
    [
        (("radius_mm = 12 }", "radius_mm = 12 }\n[[organ]]\nstructure = 'corrd'"), UnknownNameError, "corrd"),
        (("momentum_sigma = 0.02", "momentum_sigma = 0.02\nmomentum_mev_c = 60"), ReachError, "far side"),
        (("centre_mm = [0, 100, 0]", "centre_mm = [900, 0, 0]"), GridError, "outside the volume"),
        (('phantom = "small_block"', 'ct = "nowhere"'), StudyError, "does not exist"),
        (('phantom = "small_block"', 'phantom = "smal_block"'), UnknownNameError, "small_block"),
        (("[goal]", "[effect]\nmodel = 'wedenburg'\n[goal]"), UnknownNameError, "wedenberg"),
    ],
)
def test_bad_studies_end_in_a_clear_error_and_nothing_written(change, error, words, study_text, tmp_path):
    path = tmp_path / "bad.toml"
    text = study_text.replace(*change)
    assert text != study_text
    if change[0].startswith("phantom") and "ct =" in change[1]:
        text = text.replace("spacing_mm = 4.0\n", "")
    path.write_text(text, encoding="utf-8")
    with pytest.raises(error, match=words):
        run(path, tmp_path / "out")
    assert sorted(item.name for item in tmp_path.iterdir()) == ["bad.toml"]


@pytest.mark.slow
@pytest.mark.parametrize("mode", ["each_field", "all_fields"])
def test_a_search_in_three_dimensions_evens_out_the_target(mode, study_text, finished):
    _, plain = finished
    study = parse_study(study_text.replace("[goal]", f"[goal]\nweights = '{mode}'\niterations = 15"))
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", DosekitWarning)
        found = compute(study)
    assert found.histograms[found.target].homogeneity < plain.histograms[plain.target].homogeneity
    assert found.searches[0].history[-1] < found.searches[0].history[0]
