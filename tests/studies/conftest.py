"""One small study, run once for all tests of this folder."""

from __future__ import annotations

import warnings

import pytest

from dosekit.errors import DosekitWarning

STUDY = """# RESEARCH ONLY - NOT FOR CLINICAL USE
title = "A small block from two sides"
[volume]
phantom = "small_block"
spacing_mm = 4.0
[target]
sphere = { centre_mm = [0, 100, 0], radius_mm = 12 }
[beam]
momentum_sigma = 0.02
contaminants = { "mu-" = 0.05, "e-" = 0.1 }
[[field]]
name = "front"
spot_spacing_mm = 8
[[field]]
name = "left"
gantry_deg = 90
spot_spacing_mm = 8
[goal]
dose_gy = 1.5
"""


@pytest.fixture(scope="session")
def study_text():
    """The text of the small study."""
    return STUDY


@pytest.fixture(scope="session")
def finished(tmp_path_factory):
    """The folder and the result of the small study, run once."""
    from dosekit.studies.pipeline import run

    folder = tmp_path_factory.mktemp("runs")
    path = folder / "small.toml"
    path.write_text(STUDY, encoding="utf-8")
    with warnings.catch_warnings():
        warnings.simplefilter("default", DosekitWarning)
        result = run(path, folder / "out")
    return folder / "out", result
