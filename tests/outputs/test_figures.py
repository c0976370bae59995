"""Figures by what is drawn: labels, lines, extents; the caution; the same bytes each time."""

import re

import matplotlib as mpl
import matplotlib.table
import numpy as np
import pytest

from dosekit.basis.components import COMPONENTS
from dosekit.caution import BANNER
from dosekit.errors import InputError
from dosekit.outputs import style
from dosekit.outputs.figures_calibration import calibration_figure
from dosekit.outputs.figures_comparison import ParticleResult, comparison_figure, particles_depth_figure
from dosekit.outputs.figures_depth import depth_curve_figure, let_figure
from dosekit.outputs.figures_fit import fit_figure
from dosekit.outputs.figures_histogram import histogram_figure
from dosekit.outputs.figures_modulation import convergence_figure, range_steps_figure, ridge_profile_figure
from dosekit.outputs.figures_slices import component_slices_figure, slices_figure

HISTOGRAMS = {
    "Target": (np.array([0.0, 1.9, 2.0, 2.1]), np.array([1.0, 1.0, 0.5, 0.0])),
    "cord": (np.array([0.0, 0.5, 1.0]), np.array([1.0, 0.2, 0.0])),
}


def steps_figure(**changes):
    depth = np.arange(0.5, 100.0)
    ranges = np.array([40.0, 50.0, 60.0])
    curves = np.array([np.where(depth < r, 0.3, 0.0) + np.exp(-(((depth - r) / 6) ** 2)) for r in ranges])
    settings = {"interval_mm": (38.0, 62.0), "residual_range_mm": ranges, "weights": [1.0, 0.0, 2.0], "flatness": 0.031}
    return range_steps_figure(depth, curves, **(settings | changes))


def fitted_figure():
    depth = np.linspace(0, 200, 41)
    dose = 30 + 70 * np.exp(-(((depth - 150) / 10) ** 2))
    return fit_figure(
        depth,
        dose + 1.0,
        fit_depth_mm=depth,
        fitted=dose,
        sigma=np.full(41, 2.0),
        parameters={"momentum": (170.3, 0.24, "MeV/c"), "muons": (0.08, 0.012, "")},
    )


def particle_results(dose=None):
    depth = np.arange(0.5, 150.0)
    return [
        ParticleResult(
            name,
            depth,
            100 * np.exp(-(((depth - 100) / 20) ** 2)),
            let_kev_um=np.full(depth.shape, 2.0 + k),
            dose=dose,
            histograms=HISTOGRAMS,
            measures={"target D95 (%)": 95.0 + k, "beam time (s)": 60.0 * (k + 1)},
        )
        for k, name in enumerate(("pi-", "pi+", "proton"))
    ]


@pytest.fixture(scope="module")
def figures(curve, dose, anatomy):
    """Draw one of each."""
    hu = np.linspace(-1000, 3000, 41)
    density = 1 + hu / 1000
    drawn = {
        "depth": depth_curve_figure(curve, title="invented"),
        "let": let_figure(curve),
        "steps": steps_figure(),
        "ridge": ridge_profile_figure([1.0, 0.5, 2.0], [0.0, 10.0, 20.0], material="PMMA"),
        "convergence": convergence_figure([10.0, 5.0, 1.0], parts={"target": [9.0, 4.5, 0.9]}, stopped_because="done"),
        "fit": fitted_figure(),
        "histogram": histogram_figure(HISTOGRAMS, target="target", prescribed_gy=2.0),
        "calibration": calibration_figure(
            hu,
            density_g_cm3=density,
            relative_stopping_power=density,
            star_energy_mev=density * 0 + 26.0,
            tissues={"muscle": (50.0, 1.05, 1.04)},
        ),
        "slices": slices_figure(dose, anatomy, target="target", reference_gy=2.0),
        "components": component_slices_figure(dose, anatomy, target="target", reference_gy=2.0),
        "comparison": comparison_figure(particle_results(dose), anatomy, target="target", prescribed_gy=2.0),
        "particles": particles_depth_figure(particle_results(), target_interval_mm=(80.0, 110.0)),
    }
    with style.own_style():
        for figure in drawn.values():
            figure.draw_without_rendering()
    return drawn


NAMES = [
    "depth",
    "let",
    "steps",
    "ridge",
    "convergence",
    "fit",
    "histogram",
    "calibration",
    "slices",
    "components",
    "comparison",
    "particles",
]


def all_text(figure):
    texts = list(figure.findobj(mpl.text.Text))
    for table in figure.findobj(mpl.table.Table):
        texts += [cell.get_text() for cell in table.get_celld().values()]
    return [text.get_text() for text in texts if text.get_text().strip()]


def panels(figure):
    """Panels that hold a plot, subfigures included, colour bars and tables left out."""
    found = list(figure.axes)
    return [axes for axes in found if axes.axison and axes.get_label() != "<colorbar>"]


@pytest.mark.parametrize("name", NAMES)
def test_every_figure_carries_the_caution_clear_of_all_axes_and_legends(figures, name):
    figure = figures[name]
    with style.own_style():
        renderer = figure.canvas.get_renderer()
        caution = next(text for text in figure.texts if text.get_gid() == "caution")
        assert " ".join(caution.get_text().split()).startswith(BANNER)
        box = caution.get_window_extent(renderer)
        width, height = figure.bbox.width, figure.bbox.height
        assert box.x0 >= 0
        assert box.x1 <= width
        assert box.y0 >= 0
        for axes in figure.axes:
            area = axes.get_tightbbox(renderer)
            assert area is None or area.y0 >= box.y1 - 0.5, (axes.get_title(loc="left"), area, box)
        for legend in figure.legends:
            assert legend.get_window_extent(renderer).y0 >= box.y1 - 0.5
        assert height > 0


@pytest.mark.parametrize("name", NAMES)
def test_no_panel_text_leaves_the_page_and_legends_cover_no_axis_label(figures, name):
    figure = figures[name]
    with style.own_style():
        renderer = figure.canvas.get_renderer()
        for axes in figure.axes:
            area = axes.get_tightbbox(renderer)
            if area is None:
                continue
            assert area.x0 >= -1.0
            assert area.x1 <= figure.bbox.width + 1.0
            assert area.y1 <= figure.bbox.height + 1.0
            for legend in figure.legends:
                covered = legend.get_window_extent(renderer)
                overlap = min(covered.x1, area.x1) > max(covered.x0, area.x0) + 1 and min(covered.y1, area.y1) > (
                    max(covered.y0, area.y0) + 1
                )
                assert not overlap, (name, covered, area)


@pytest.mark.parametrize("name", NAMES)
def test_every_figure_has_a_paper_width_and_words_for_those_who_cannot_see_it(figures, name):
    figure = figures[name]
    assert round(figure.get_size_inches()[0] * 25.4) in {round(style.COLUMN_MM), round(style.PAGE_MM)}
    assert len(figure.get_label()) > 30
    assert figure.get_label().endswith(".")


@pytest.mark.parametrize("name", ["depth", "slices"])
def test_written_files_are_the_same_bytes_without_dates_or_programs(figures, name, tmp_path):
    first = style.write_figure(figures[name], tmp_path / "one" / "figure")
    second = style.write_figure(figures[name], tmp_path / "two" / "figure")
    for a, b in ((first.pdf, second.pdf), (first.png, second.png)):
        assert a.read_bytes() == b.read_bytes()
    pdf = first.pdf.read_bytes()
    assert pdf.startswith(b"%PDF")
    for word in (b"CreationDate", b"ModDate", b"Matplotlib v"):
        assert word not in pdf
    assert BANNER.encode() in pdf
    png = first.png.read_bytes()
    assert BANNER.encode() in png
    assert b"matplotlib" not in png.lower()
    width = int.from_bytes(png[16:20], "big")
    assert abs(width - style.PAGE_MM / 25.4 * 300) <= 1
    assert [path.name for path in sorted(first.pdf.parent.iterdir())] == ["figure.pdf", "figure.png"]


def test_a_figure_drawn_anew_is_the_same_file(curve, tmp_path):
    one = style.write_figure(depth_curve_figure(curve), tmp_path / "a")
    with mpl.rc_context({"font.size": 20.0, "axes.grid": True, "lines.linewidth": 9.0}):
        two = style.write_figure(depth_curve_figure(curve), tmp_path / "b" / "a")
    assert one.png.read_bytes() == two.png.read_bytes()
    assert one.pdf.read_bytes() == two.pdf.read_bytes()


def test_drawing_leaves_the_callers_settings_and_backend_alone(curve, tmp_path):
    before = dict(mpl.rcParams)
    style.write_figure(depth_curve_figure(curve), tmp_path / "a")
    assert dict(mpl.rcParams) == before


def test_colours_cover_all_components_and_differ():
    assert tuple(style.COMPONENT_COLOURS) == COMPONENTS
    assert tuple(style.COMPONENT_LABELS) == COMPONENTS
    assert len(set(style.COMPONENT_COLOURS.values())) == len(COMPONENTS)
    pairs = {(str(style.COMPONENT_DASHES[name]), style.COMPONENT_COLOURS[name]) for name in COMPONENTS}
    assert len(pairs) == len(COMPONENTS)


def test_depth_figure_draws_each_component_and_the_sum(curve, figures):
    stacked, logged = panels(figures["depth"])
    total = curve["energy"].sum("component").values
    np.testing.assert_allclose(stacked.lines[0].get_ydata(), total)
    areas = [c for c in stacked.collections if c.get_label() in style.COMPONENT_LABELS.values()]
    assert len(areas) == len(COMPONENTS)
    # The areas lie on each other: the last one's top is the sum.
    assert max(path.vertices[:, 1].max() for path in areas[-1].get_paths()) == pytest.approx(total.max())
    assert len(logged.lines) == len(COMPONENTS) + 1
    labels = [line.get_label() for line in logged.lines]
    assert labels == ["total", *style.COMPONENT_LABELS.values()]
    assert logged.get_yscale() == "log"
    peak = curve["depth"].values[np.argmax(total)]
    assert any(f"peak {peak:.0f} mm" in text for text in all_text(figures["depth"]))
    assert stacked.get_xlim() == (0.0, 199.5)


def test_depth_figure_leaves_out_only_empty_components(curve):
    thin = curve.copy(deep=True)
    thin["energy"].loc[{"component": "decay"}] = 0.0
    _, logged = panels(depth_curve_figure(thin))
    assert len(logged.lines) == len(COMPONENTS)
    assert style.COMPONENT_LABELS["decay"] not in [line.get_label() for line in logged.lines]


def test_layers_are_ruled_off_and_named_where_the_curve_knows_them(curve):
    names = ["muscle_skeletal"] * 40 + ["water"] * (curve.sizes["depth"] - 40)
    figure = depth_curve_figure(curve.assign_coords(layer=("depth", names)))
    for axes in panels(figure):
        edges = [line for line in axes.lines if line.get_gid() == "layer edge"]
        assert [float(edge.get_xdata()[0]) for edge in edges] == [40.0]
    assert [text.get_text() for text in panels(figure)[0].texts if text.get_gid() == "layer"] == [
        "muscle skeletal",
        "water",
    ]


def test_let_of_the_whole_dose_is_the_dose_weighted_mean(curve, figures):
    line = next(line for line in panels(figures["let"])[0].lines if line.get_label() == "whole dose")
    energy, let = curve["energy"].values, curve["let_dose"].values
    expected = (energy * let).sum(axis=0) / energy.sum(axis=0)
    np.testing.assert_allclose(line.get_ydata()[110], expected[110])


def test_step_figure_draws_only_the_steps_in_use_scaled_to_the_interval():
    figure = steps_figure()
    main, bars = panels(figure)
    total = next(line for line in main.lines if line.get_label() == "sum of the steps")
    depth, percent = total.get_xdata(), total.get_ydata()
    inside = (depth >= 38.0) & (depth <= 62.0)
    assert percent[inside].mean() == pytest.approx(100.0)
    thin = [line for line in main.lines if line.get_linewidth() == 0.6]
    assert len(thin) == 2
    assert len(bars.patches) == 3
    assert sum(patch.get_height() for patch in bars.patches) == pytest.approx(100.0)
    assert any("±3.1 %" in text for text in all_text(figure))


def test_step_figure_draws_what_is_flat_beside_the_dose_when_they_differ():
    depth = np.arange(0.5, 100.0)
    flat = np.where(depth < 62.0, 3.0, 0.1)
    main, _ = panels(steps_figure(quantity="effect-weighted dose", flat_dose=flat))
    line = next(line for line in main.lines if line.get_label() == "effect-weighted dose")
    np.testing.assert_allclose(line.get_ydata()[depth < 62.0], 100.0)
    assert any(line.get_label() == "dose, sum" for line in main.lines)
    with pytest.raises(InputError, match="effect-weighted dose"):
        steps_figure(quantity="effect-weighted dose", flat_dose=flat[:-1])


@pytest.mark.parametrize("weights", [[0.0, 0.0, 0.0], [1.0, -1.0, 2.0], [1.0, 2.0]])
def test_step_figure_refuses_weights_that_cannot_be(weights):
    with pytest.raises(InputError):
        steps_figure(weights=weights)


def test_ridge_is_symmetric_and_as_wide_as_its_terraces(figures):
    stairs = panels(figures["ridge"])[0].patches[0]
    values, edges, _ = stairs.get_data()
    np.testing.assert_allclose(values, values[::-1])
    np.testing.assert_allclose(edges[-1], 3.5)
    np.testing.assert_allclose(np.diff(edges), np.diff(edges)[::-1])
    # The width at each height is the width that was asked for.
    for height, width in ((0.0, 1.0), (10.0, 0.5), (20.0, 2.0)):
        assert np.diff(edges)[values == height].sum() == pytest.approx(width)


def test_fit_figure_shows_the_residual_that_is_there(figures):
    main, rest = panels(figures["fit"])
    np.testing.assert_allclose(rest.lines[-1].get_ydata(), 100.0 / 101.0, rtol=1e-6)
    assert any("momentum 170.30 ± 0.24 MeV/c" in text for text in all_text(figures["fit"]))
    assert any("muons 0.080 ± 0.012" in text for text in all_text(figures["fit"]))
    assert main.get_ylim()[1] > 101.0


def test_histogram_figure_ends_at_the_largest_dose_and_names_structures(figures):
    axes = panels(figures["histogram"])[0]
    assert [line.get_label() for line in axes.lines] == ["Target", "cord", "prescribed"]
    assert axes.get_xlim()[0] == 0.0
    assert 2.0 <= axes.get_xlim()[1] <= 2.4
    assert axes.lines[0].get_color() == style.INK
    np.testing.assert_allclose(axes.lines[0].get_ydata(), [100, 100, 50, 0])


def test_slices_have_patient_directions_true_aspect_and_named_outlines(figures, anatomy):
    figure = figures["slices"]
    transverse, coronal, sagittal = panels(figure)
    letters = {
        axes: [text.get_text() for text in axes.texts if text.get_gid() == "direction"]
        for axes in (transverse, coronal, sagittal)
    }
    # left, right, top, bottom of the picture
    assert letters[transverse] == ["R", "L", "A", "P"]
    assert letters[coronal] == ["R", "L", "S", "I"]
    assert letters[sagittal] == ["A", "P", "S", "I"]
    # x grows to the patient's left, y to the back, z to the head: the axis limits must say the same.
    assert transverse.get_xlim()[0] < transverse.get_xlim()[1]
    assert transverse.get_ylim()[0] > transverse.get_ylim()[1]
    assert coronal.get_ylim()[0] < coronal.get_ylim()[1]
    assert sagittal.get_ylim()[0] < sagittal.get_ylim()[1]
    assert all(axes.get_aspect() == 1.0 for axes in (transverse, coronal, sagittal))
    legend = [text.get_text() for text in figure.legends[0].get_texts()]
    assert legend == ["Target"]  # the organ lies in none of these planes


def test_slices_show_the_dose_where_it_is(dose, anatomy):
    """The brightest pixel of each picture lies at the dose maximum, with the picture's own extent."""
    total = dose["dose"].sum("component").values
    z, y, x = np.unravel_index(np.argmax(total), total.shape)
    maximum = {axis: anatomy.centres_mm(axis)[i] for axis, i in zip("zyx", (z, y, x), strict=True)}
    point = tuple(maximum[axis] for axis in "xyz")
    figure = slices_figure(dose, anatomy, point_mm=point)
    for axes, (across, down) in zip(panels(figure), (("x", "y"), ("x", "z"), ("y", "z")), strict=True):
        picture = axes.images[1]
        values = picture.get_array()
        row, column = np.unravel_index(np.argmax(values), values.shape)
        left, right, first, last = picture.get_extent()
        assert picture.origin == "lower"
        assert left + (column + 0.5) * (right - left) / values.shape[1] == pytest.approx(maximum[across])
        assert first + (row + 0.5) * (last - first) / values.shape[0] == pytest.approx(maximum[down])
        assert values.max() == pytest.approx(100.0)


def test_another_quantity_is_drawn_and_named(dose, anatomy):
    effect = dose["dose"].sum("component") * 3.0
    with_effect = dose.assign(effect_dose=effect)
    settings = {"target": "target", "reference_gy": 2.0}
    plain = panels(slices_figure(dose, anatomy, **settings))[0]
    figure = slices_figure(with_effect, anatomy, variable="effect_dose", quantity="effect-weighted dose", **settings)
    np.testing.assert_allclose(
        panels(figure)[0].images[1].get_array(), 3.0 * plain.images[1].get_array(), rtol=1e-5, atol=1e-6
    )
    assert any("effect-weighted dose (% of 2 Gy)" in text for text in all_text(figure))


def test_scale_bar_has_the_length_it_says(figures):
    for axes in panels(figures["slices"]):
        bar = next(line for line in axes.lines if line.get_gid() == "scale bar")
        said = next(text for text in axes.texts if text.get_text().endswith(" mm")).get_text()
        assert np.ptp(bar.get_xdata()) == pytest.approx(float(said.removesuffix(" mm")))


def test_isodose_lines_lie_at_their_dose(dose, anatomy):
    """Along each line the dose, read between voxels, is the level on its label."""
    from scipy.interpolate import RegularGridInterpolator

    figure = slices_figure(dose, anatomy, target="target", reference_gy=2.0, isodose_percent=(50.0,))
    axes = panels(figure)[0]
    lines = next(c for c in axes.collections if c.get_gid() == "isodoses")
    total = dose["dose"].sum("component").values
    nearest = np.argmin(np.abs(anatomy.centres_mm("z") - anatomy.centroid_mm("target")[2]))
    read = RegularGridInterpolator((anatomy.centres_mm("y"), anatomy.centres_mm("x")), total[nearest])
    path = np.concatenate([p.vertices for p in lines.get_paths()])
    assert len(path) > 10
    np.testing.assert_allclose(read(path[:, ::-1]), 1.0, rtol=0.02)


def test_component_slices_have_one_panel_for_each_component_with_its_maximum(figures, dose):
    shown = panels(figures["components"])
    assert len(shown) == len(COMPONENTS)
    for axes, name in zip(shown, COMPONENTS, strict=True):
        title = axes.get_title(loc="left")
        assert style.COMPONENT_LABELS[name] in title
        top = 100.0 * float(dose["dose"].sel(component=name).max()) / 2.0
        assert f"{top:.2g} %" in title


def test_a_structure_keeps_its_colour_from_slices_to_histograms(dose, anatomy):
    figure = slices_figure(dose, anatomy, point_mm=anatomy.centroid_mm("cord"))
    outline = next(
        c for axes in panels(figure) for c in axes.collections if c.get_gid() == "outline cord"
    ).get_edgecolor()[0]
    axes = panels(histogram_figure({"cord": HISTOGRAMS["cord"]}, order=list(anatomy.structures)))[0]
    np.testing.assert_allclose(mpl.colors.to_rgba(axes.lines[0].get_color()), outline)


def test_slices_refuse_a_dose_of_nothing_and_a_point_outside(dose, anatomy):
    with pytest.raises(InputError, match="reference dose"):
        slices_figure(dose * 0.0, anatomy, target="target")
    with pytest.raises(InputError, match="transverse slice"):
        slices_figure(dose, anatomy, point_mm=(0.0, 0.0, 1e4))
    with pytest.raises(InputError, match="unknown component"):
        slices_figure(dose, anatomy, components=["protons"])
    with pytest.raises(InputError, match="Target"):
        slices_figure(dose, anatomy, target="targett")


def test_comparison_page_has_curves_slices_histograms_and_a_table(figures):
    figure = figures["comparison"]
    words = all_text(figure)
    for expected in ("target D95 (%)", "beam time (s)", "95", "97", "180", "volume histograms"):
        assert any(expected in text for text in words), expected
    axes = [a for a in figure.axes if a.axison and a.get_label() != "<colorbar>"]
    depth, let, *maps, histograms = axes
    assert len(maps) == 3
    assert len(depth.lines) == 3
    assert len({str(line.get_color()) for line in depth.lines}) == 3
    assert let.get_yscale() == "log"
    assert len(histograms.lines) == 3 * len(HISTOGRAMS)


def test_a_curve_from_elsewhere_carries_its_source():
    own, *_ = particle_results()
    other = ParticleResult("carbon12", own.depth_mm, own.dose_percent, source="A. Author 1999")
    labels = [line.get_label() for line in panels(particles_depth_figure([own, other]))[0].lines]
    assert any("A. Author 1999" in label for label in labels)


def test_no_identity_in_any_figure(figures, tmp_path):
    for figure in figures.values():
        words = [*all_text(figure), figure.get_label()]
        assert len(words) > 5
        assert not any("PLANTED" in text for text in words)
    files = style.write_figure(figures["slices"], tmp_path / "slices")
    assert not re.search(rb"PLANTED", files.pdf.read_bytes() + files.png.read_bytes())
