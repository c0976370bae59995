"""What all tests share: seeded randomness, CT data, and the page of evidence."""

from __future__ import annotations

import os
from pathlib import Path

import numpy as np
import pytest

import evidence_page

_ROWS: list[dict[str, object]] = []


def pytest_addoption(parser):
    parser.addoption(
        "--evidence-page",
        default=None,
        metavar="FILE",
        help="write the page of published and reference checks to FILE (docs/explanation/evidence.md)",
    )


@pytest.fixture
def rng():
    """Random numbers from a fixed seed."""
    return np.random.default_rng(20260117)


@pytest.fixture(scope="session")
def ct_dir():
    """Folder with the CT sets that do not ship with the project."""
    folder = os.environ.get("DOSEKIT_CT_DIR")
    if not folder:
        pytest.skip("DOSEKIT_CT_DIR is not set: no real CT data here")
    path = Path(folder)
    if not path.is_dir():
        pytest.fail(f"DOSEKIT_CT_DIR={folder} is not a folder")
    return path


@pytest.fixture
def evidence(request):
    """Record one comparison for the page of evidence."""

    def record(*, what, source, value, ours, unit="", bar="", kind="published"):
        _ROWS.append(
            {
                "test": request.node.nodeid.split("::")[0],
                "what": str(what),
                "source": str(source),
                "value": float(value),
                "ours": float(ours),
                "unit": str(unit),
                "bar": str(bar),
                "kind": str(kind),
            }
        )

    return record


def pytest_sessionfinish(session):
    worker = getattr(session.config, "workeroutput", None)
    if worker is not None:
        worker["evidence"] = list(_ROWS)
        return
    target = session.config.getoption("--evidence-page")
    if target:
        Path(target).write_text(evidence_page.render(_ROWS), encoding="utf-8")


@pytest.hookimpl(optionalhook=True)
def pytest_testnodedown(node):
    _ROWS.extend(getattr(node, "workeroutput", {}).get("evidence", []))
