"""Figure pages as Secondary Capture."""

from __future__ import annotations

import numpy as np
import pytest
from PIL import Image

from dosekit.errors import InputError
from dosekit.outputs.dicom_figures import write_secondary_capture
from dosekit.outputs.dicom_reference import invented_reference

from dicom_judges import RESEARCH_ONLY, check_house_rules, judge

RUN = "4d" * 32


@pytest.mark.parametrize(("mode", "size"), [("RGB", (31, 17)), ("RGBA", (30, 16)), ("L", (5, 5)), ("P", (8, 4))])
def test_judges_accept_and_pixels_stay(tmp_path, rng, mode, size):
    picture = Image.fromarray(rng.integers(0, 255, (size[1], size[0], 3), dtype=np.uint8)).convert(mode)
    picture.save(tmp_path / "page.png")
    path = write_secondary_capture(
        tmp_path / "page.dcm", tmp_path / "page.png", reference=invented_reference(RUN), run_hash=RUN
    )
    judge(path, radiotherapy=False)
    head = check_house_rules(path)
    assert RESEARCH_ONLY in head.ImageComments
    assert np.array_equal(head.pixel_array, np.asarray(picture.convert("RGB")))


def test_what_is_no_picture_is_refused(tmp_path):
    (tmp_path / "page.png").write_bytes(b"no picture")
    with pytest.raises(InputError, match=r"page\.png"):
        write_secondary_capture(
            tmp_path / "page.dcm", tmp_path / "page.png", reference=invented_reference(RUN), run_hash=RUN
        )
    assert [path.name for path in tmp_path.iterdir()] == ["page.png"]
