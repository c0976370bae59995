"""Report and summary: whole without a network, safe with any names, readable without eyes or colour."""

import re
from html.parser import HTMLParser
from itertools import pairwise

import numpy as np
import pytest

from dosekit.caution import BANNER, CAUTION
from dosekit.errors import InputError
from dosekit.outputs import style
from dosekit.outputs.figures_depth import depth_curve_figure
from dosekit.outputs.record import InputFile, RunRecord, package_versions
from dosekit.outputs.report import ReportFigure, report_figure, report_html, write_report
from dosekit.outputs.summary import RunSummary, console_line, mean_doses_gy, star_share, summary_text
from dosekit.outputs.tables import component_table, measures_table

HOSTILE = '<script>alert(1)</script>"&'
VOID = {"meta", "img", "br", "link", "hr", "input"}


class Page(HTMLParser):
    """Collect what the page is made of, and fail on tags that do not close."""

    def __init__(self, text):
        super().__init__()
        self.tags, self.open, self.words = [], [], []
        self.feed(text)
        self.close()
        assert self.open == []

    def handle_starttag(self, tag, attrs):
        self.tags.append((tag, dict(attrs)))
        if tag not in VOID:
            self.open.append(tag)

    def handle_endtag(self, tag):
        assert self.open.pop() == tag

    def handle_data(self, data):
        self.words.append(data)

    def named(self, name):
        return [attrs for tag, attrs in self.tags if tag == name]


def summary(**changes):
    settings = {
        "title": "One field",
        "target": "target",
        "quantity": "dose",
        "flatness_percent": 1.26,
        "peak_depth_mm": 171.4,
        "peak_to_entrance": 1.93,
        "star_share": 0.314,
        "mean_dose_gy": 2.0,
        "beam_time_s": 312.0,
        "component_doses_gy": {"primary": 1.3, "star_light": 0.7},
        "measures": {"target": {"D95 (Gy)": 1.93}},
        "energy_balance": {"in_mev": 204.0},
        "sources": ("A. Author 1980",),
        "warnings": ("outside validity",),
        "run_hash": "f00d" * 16,
    }
    return RunSummary(**(settings | changes))


def record(**changes):
    settings = {
        "run_hash": "f00d" * 16,
        "study_text": "title = 'x'\n",
        "inputs": (InputFile("ct", 2, 10, "ab" * 32),),
        "versions": package_versions(),
        "sources": ("A. Author 1980",),
        "warnings": ("outside validity",),
        "energy_balance": {"in_mev": 204.0},
    }
    return RunRecord(**(settings | changes))


@pytest.fixture(scope="module")
def picture(curve, tmp_path_factory):
    files = style.write_figure(depth_curve_figure(curve), tmp_path_factory.mktemp("figures") / "depth")
    return report_figure(files, caption="Depth dose by component.")


@pytest.fixture(scope="module")
def page_text(picture):
    return report_html(
        summary(),
        record(),
        figures=[picture],
        tables=[("Components", component_table({"target": {"primary": 1.3, "star_light": 0.7}}))],
    )


def test_caution_comes_first_and_last(page_text):
    page = Page(page_text)
    assert page_text.count(BANNER) >= 3  # title, top, foot
    words = " ".join(" ".join(page.words).split())
    body = words[words.index("}", words.rindex("@page")) :] if "@page" in words else words
    assert body.index(BANNER) < body.index("One field")
    assert CAUTION.removeprefix(BANNER + ". ")[:60] in body
    assert body.rstrip().endswith(BANNER)


def test_nothing_is_fetched_and_nothing_runs(page_text):
    page = Page(page_text)
    assert page.named("script") == []
    assert page.named("link") == []
    for tag, attrs in page.tags:
        for name in ("src", "href", "action", "data"):
            value = attrs.get(name)
            assert value is None or value.startswith(("data:image/png;base64,", "#")), (tag, name)
    assert not re.search(r"https?://|url\(|@import", page_text)


def test_the_page_can_be_read_without_eyes(page_text, picture):
    page = Page(page_text)
    assert page.named("html")[0]["lang"] == "en"
    assert len(page.named("h1")) == 1
    assert [attrs["alt"] for attrs in page.named("img")] == [picture.alt]
    assert len(picture.alt) > 30
    levels = [int(tag[1]) for tag, _ in page.tags if re.fullmatch(r"h[1-6]", tag)]
    assert all(after <= before + 1 for before, after in pairwise(levels))
    targets = {attrs["id"] for _, attrs in page.tags if "id" in attrs}
    assert {attrs["href"][1:] for attrs in page.named("a")} <= targets
    assert len(page.named("caption")) == len(page.named("table"))
    assert all("scope" in attrs for attrs in page.named("th"))


def test_everything_asked_for_is_in_it(page_text):
    words = " ".join(" ".join(Page(page_text).words).split())
    for part in (
        "±1.3 %",
        "171.4 mm",
        "31.4 %",
        "312.0 s",
        "outside validity",
        "A. Author 1980",
        "in (MeV)",
        "star_light",
        "title = 'x'",
        "dosekit run STUDY.toml",
        "numpy",
        "mean dose (Gy)",
        "abababab",
    ):
        assert part in words, part


def test_names_from_outside_are_only_ever_text(picture):
    text = report_html(
        summary(title=HOSTILE, target=HOSTILE, quantity=HOSTILE),
        record(
            study_text=HOSTILE,
            sources=(HOSTILE,),
            warnings=(HOSTILE,),
            inputs=(InputFile(HOSTILE, 1, 1, HOSTILE),),
            energy_balance={HOSTILE: 1.0},
            versions={HOSTILE: HOSTILE},
        ),
        figures=[ReportFigure(HOSTILE, HOSTILE, picture.png)],
        tables=[(HOSTILE, measures_table({HOSTILE: {HOSTILE: 1.0}}, units=HOSTILE))],
        repeat_command=HOSTILE,
    )
    page = Page(text)
    assert page.named("script") == []
    assert "<script" not in text
    assert page.named("img")[0]["alt"] == HOSTILE


def test_the_smallest_report_is_whole():
    text = report_html(summary(warnings=(), energy_balance={}), RunRecord(run_hash="a", study_text=""))
    assert Page(text).named("img") == []
    assert "nothing but what ships" in text


def test_the_same_report_is_the_same_bytes(page_text, picture, tmp_path):
    again = report_html(
        summary(),
        record(),
        figures=[picture],
        tables=[("Components", component_table({"target": {"primary": 1.3, "star_light": 0.7}}))],
    )
    assert again == page_text
    assert write_report(tmp_path / "report.html", again).read_bytes() == page_text.encode()


def test_a_picture_that_is_none_is_refused():
    with pytest.raises(InputError, match="PNG"):
        report_html(summary(), record(), figures=[ReportFigure("a", "b", b"GIF89a")])


def test_console_line_says_the_four_things():
    line = console_line(summary())
    assert "\n" not in line
    for part in ("flat to ±1.3 %", "peak at 171 mm", "31 % of the target dose from stars", BANNER):
        assert part in line


def test_summary_text_has_its_parts_in_order():
    text = summary_text(summary())
    order = [
        text.index(part)
        for part in (BANNER, "One field", "by component", "D95", "Energy balance", "Warnings", "Sources")
    ]
    assert order == sorted(order)
    assert "65.0 %" in text  # 1.3 of 2.0
    assert max(len(line) for line in text.splitlines()) <= 120
    assert "none" in summary_text(summary(warnings=()))


def test_flatness_is_never_told_without_where_it_was_judged_and_what_the_target_gets():
    told = summary(
        flat_field="left", flat_from_mm=140.0, flat_to_mm=196.0, target_d98_percent=76.0, target_d2_percent=116.0
    )
    for text in (console_line(told), summary_text(told), report_html(told, record())):
        for part in ("140", "196", "left", "76 %", "116 %"):
            assert part in text, part


def test_star_share_counts_all_four_star_parts_and_no_other():
    parts = {
        "primary": 4.0,
        "in_flight": 1.0,
        "decay": 1.0,
        "star_light": 1.0,
        "star_heavy": 1.0,
        "star_neutron": 1.0,
        "star_photon": 1.0,
    }
    assert star_share(parts) == pytest.approx(0.4)
    assert star_share({}) == 0.0


def test_mean_doses_weigh_by_coverage(dose, anatomy):
    ones = np.ones(anatomy.shape)
    means = mean_doses_gy(dose, ones)
    for name, value in means.items():
        assert value == pytest.approx(float(dose["dose"].sel(component=name).values.mean(dtype=np.float64)), rel=1e-6)
    one_voxel = np.zeros(anatomy.shape)
    one_voxel[5, 9, 7] = 0.25
    assert mean_doses_gy(dose, one_voxel)["primary"] == pytest.approx(float(dose["dose"].values[0, 5, 9, 7]))
    with pytest.raises(InputError, match="without volume"):
        mean_doses_gy(dose, np.zeros(anatomy.shape))
    with pytest.raises(InputError, match="shape"):
        mean_doses_gy(dose, np.ones((2, 2, 2)))


def test_no_identity_in_report_summary_or_tables(dose, anatomy, picture):
    """What is drawn from a grid whose DICOM reference and source name a patient does not name the patient."""
    doses = {name: mean_doses_gy(dose, anatomy.structure(name)) for name in anatomy.structures}
    table = component_table(doses)
    whole = summary(component_doses_gy=doses["Target"], target=anatomy.structure_name("target"))
    texts = [
        table.csv(run_hash="a"),
        summary_text(whole, settings=table),
        report_html(whole, record(), figures=[picture], tables=[("Components", table)]),
    ]
    assert "PLANTED" in repr(anatomy.source) + repr(anatomy.dicom_reference)
    for text in texts:
        assert "Target" in text
        assert "PLANTED" not in text
    assert "PLANTED" not in console_line(whole)
