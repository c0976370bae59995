"""Gallery scripts run as they stand and leave the figures that they promise."""

import importlib.util
import re
from pathlib import Path

import pytest

GALLERY = Path(__file__).resolve().parents[2] / "docs" / "gallery"
SCRIPTS = sorted(GALLERY.glob("*.py"))


def test_the_page_names_every_script():
    page = (GALLERY / "README.md").read_text(encoding="utf-8")
    assert len(SCRIPTS) >= 6
    assert set(re.findall(r"`(\w+\.py)`", page)) == {path.name for path in SCRIPTS}


@pytest.mark.slow
@pytest.mark.parametrize("script", SCRIPTS, ids=lambda path: path.stem)
def test_script_draws_its_figures(script, tmp_path):
    spec = importlib.util.spec_from_file_location(f"gallery_{script.stem}", script)
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    module.main(tmp_path)
    promised = set(re.findall(r'folder / "(\w+)"', script.read_text(encoding="utf-8")))
    assert promised
    assert {path.name for path in tmp_path.iterdir()} == {
        f"{name}.{kind}" for name in promised for kind in ("pdf", "png")
    }
