"""Tables: heads in full, numbers that add up, names that cannot hurt a spreadsheet."""

import csv
import io

import numpy as np
import pytest

from dosekit.basis.components import COMPONENTS
from dosekit.beams.beam import Beam
from dosekit.caution import BANNER
from dosekit.errors import InputError
from dosekit.maps.fields import Field
from dosekit.outputs.tables import (
    OutputTable,
    component_share_table,
    component_table,
    depth_curve_table,
    histogram_table,
    measures_table,
    settings_table,
    spots_table,
)


def parsed(text):
    lines = text.splitlines()
    head = [line for line in lines if line.startswith("#")]
    assert lines[: len(head)] == head, "comments come first"
    return head, list(csv.DictReader(io.StringIO("\n".join(lines[len(head) :]))))


@pytest.fixture
def fields(rng):
    beam = Beam("pi-", momentum_mev_c=170, momentum_sigma=0.02)
    weights = rng.random((4, 3))
    weights[2, 1] = 0.0
    return [
        Field(
            name,
            beam,
            isocentre_mm=(0, 0, 0),
            gantry_deg=angle,
            spots_mm=rng.random((4, 2)),
            shift_mm=np.array([0.0, 6.0, 12.0]),
            weights=weights * (1 + angle),
        )
        for name, angle in (("front", 0), ("left", 90))
    ]


def test_settings_add_up_to_the_fields_and_to_the_time_at_the_rate(fields):
    table = settings_table(
        fields,
        residual_range_mm={"front": [190.0, 184.0, 178.0], "left": [190.0, 184.0, 178.0]},
        particles_per_s=2e8,
        sources=("invented",),
    )
    head, rows = parsed(table.csv(run_hash="f00d"))
    assert BANNER in head[0]
    assert any(line.startswith("# units: ") and "2e+08 particles per second" in line for line in head)
    assert "# source: invented" in head
    assert "# run: f00d" in head
    assert [row["step"] for row in rows] == ["1", "2", "3"] * 2
    for field in fields:
        mine = [row for row in rows if row["field"] == field.name]
        assert sum(float(row["particles"]) for row in mine) == pytest.approx(field.particles, rel=1e-6)
        assert sum(float(row["share_percent"]) for row in mine) == pytest.approx(100.0, rel=1e-6)
        assert [float(row["water_equivalent_thickness_mm"]) for row in mine] == [0.0, 6.0, 12.0]
        assert [int(row["spots"]) for row in mine] == [4, 3, 4]
        for row in mine:
            assert float(row["time_s"]) == pytest.approx(float(row["particles"]) / 2e8, rel=1e-6)
            assert float(row["particles"]) == pytest.approx(1e9 * float(row["weight_1e9"]), rel=1e-6)


def test_settings_refuse_what_does_not_fit(fields):
    with pytest.raises(InputError, match="residual ranges"):
        settings_table(fields, residual_range_mm={"front": [1.0], "left": [1.0]}, particles_per_s=1e8)
    for rate in (0.0, -1.0, float("nan")):
        with pytest.raises(InputError, match="particles per second"):
            settings_table(fields, residual_range_mm={}, particles_per_s=rate)


def test_spots_hold_every_particle_and_leave_out_empty_spots(fields):
    _, rows = parsed(spots_table(fields).csv(run_hash=""))
    assert len(rows) == 2 * 11
    total = sum(float(row["particles"]) for row in rows)
    assert total == pytest.approx(sum(field.particles for field in fields), rel=1e-6)
    assert not any(row["spot"] == "3" and row["step"] == "2" for row in rows)


def test_text_is_aligned():
    table = OutputTable("t", ("name", "value_mm"), "mm", (("a", 1.0), ("longer", 20.25), ("none", float("nan"))))
    lines = table.text().splitlines()
    assert lines == ["name    value_mm", "------  --------", "a              1", "longer     20.25", "none           -"]


def test_histograms_components_and_measures():
    dose, part = np.array([0.0, 1.0, 2.0]), np.array([1.0, 0.5, 0.0])
    _, rows = parsed(histogram_table({"cord": (dose, part)}, volumes_cm3={"cord": 8.0}).csv(run_hash=""))
    assert [(r["dose_gy"], r["volume_percent"], r["volume_cm3"]) for r in rows] == [
        ("0", "100", "8"),
        ("1", "50", "4"),
        ("2", "0", "0"),
    ]
    _, rows = parsed(component_table({"target": {"primary": 1.5, "star_light": 0.5}}).csv(run_hash=""))
    assert [(r["component"], r["mean_dose_gy"], r["share_percent"]) for r in rows] == [
        ("primary", "1.5", "75"),
        ("star_light", "0.5", "25"),
        ("total", "2", "100"),
    ]
    _, rows = parsed(component_share_table({"cord": {"primary": 1.5, "decay": 0.5}, "x": {}}).csv(run_hash=""))
    assert rows[0] == {"structure": "cord", "mean_dose_gy": "2", "primary_percent": "75", "decay_percent": "25"}
    assert rows[1]["primary_percent"] == ""  # no dose, no share
    _, rows = parsed(measures_table({"a": {"D95": 1.0}, "b": {"V20": 3.0}}, units="Gy, %").csv(run_hash=""))
    assert rows == [{"structure": "a", "D95": "1", "V20": ""}, {"structure": "b", "D95": "", "V20": "3"}]


def test_depth_curve_table_is_the_curve(curve):
    _, rows = parsed(depth_curve_table(curve).csv(run_hash=""))
    assert len(rows) == curve.sizes["depth"]
    for name in COMPONENTS:
        column = [float(row[f"{name}_mev_mm"]) for row in rows]
        np.testing.assert_allclose(column, curve["energy"].sel(component=name).values, rtol=1e-6, atol=1e-30)
    np.testing.assert_allclose(
        [float(row["total_mev_mm"]) for row in rows], curve["energy"].sum("component").values, rtol=1e-6
    )


@pytest.mark.parametrize("name", ["=1+1", "@x", "+a", "-a"])
def test_a_name_is_never_a_formula(name):
    _, rows = parsed(measures_table({name: {"D95": 1.0}}, units="Gy").csv(run_hash=""))
    assert rows[0]["structure"] == "'" + name


def test_a_name_with_breaks_or_commas_keeps_the_table_whole():
    _, rows = parsed(measures_table({'a, "b"\n# c': {"D95": 1.0}}, units="one\ntwo").csv(run_hash="x\n=y"))
    assert rows == [{"structure": 'a, "b" # c', "D95": "1"}]


def test_rows_of_another_length_are_refused():
    with pytest.raises(InputError, match="row 2"):
        OutputTable("t", ("a", "b"), "mm", ((1.0, 2.0), (1.0,)))


def test_written_twice_the_same(tmp_path, curve):
    table = depth_curve_table(curve)
    one, two = (table.write(tmp_path / name / "t.csv", run_hash="a").read_bytes() for name in "ab")
    assert one == two
    assert b"\r" not in one
