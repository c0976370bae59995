"""Dose-volume histograms inside an RT Dose object.

Each histogram is cumulative: a list of pairs of a dose step and the volume that has
at least the dose at which the step begins, from nought to the structure's maximum.
With histograms the dose object refers to its structure set directly, without them
by way of its RT Ion Plan (a structure reference alone would make the object claim a
histogram module it does not have).

Source: DICOM PS3.3 C.8.8.4.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING

import numpy as np
from pydicom.dataset import Dataset
from pydicom.uid import RTStructureSetStorage

from dosekit.errors import InputError
from dosekit.outputs.dicom_objects import number_text, reference_item

if TYPE_CHECKING:
    from dosekit.effects.histograms import VolumeHistogram
    from dosekit.outputs.dicom_reference import DicomReference

__all__ = ["add_histograms"]

STEPS = 200


def add_histograms(
    head: Dataset, histograms: Mapping[int, VolumeHistogram], *, reference: DicomReference, dose_type: str
) -> None:
    """Add histograms to an RT Dose object.

    Parameters
    ----------
    head : pydicom.Dataset
        The object; changed in place.
    histograms : mapping of int to VolumeHistogram
        Number of the structure in the structure set (from 1, in the order they were written) to its histogram.
    reference : DicomReference
        Names the structure set.
    dose_type : str
        PHYSICAL or EFFECTIVE, as the dose.

    Raises
    ------
    InputError
        If there is no structure set to refer to, or a number is below 1.
    """
    if not histograms:
        return
    if not reference.structure_set_instance_uid or min(histograms) < 1:
        raise InputError(
            f"histograms of structures {sorted(histograms)}",
            allowed="numbers from 1 upwards in a structure set that the reference names",
        )
    head.ReferencedStructureSetSequence = [reference_item(RTStructureSetStorage, reference.structure_set_instance_uid)]
    head.DVHSequence = [_item(number, found, dose_type) for number, found in sorted(histograms.items())]


def _item(number: int, found: VolumeHistogram, dose_type: str) -> Dataset:
    dose_gy, share = found.curve(STEPS + 1)
    width_gy = float(dose_gy[1]) or 1.0  # nothing but zero dose: steps of 1 Gy, nothing reaches the second
    volumes_cm3 = share[:-1] * found.total_volume_cm3 if dose_gy[-1] > 0.0 else np.array([found.total_volume_cm3])
    roi = Dataset()
    roi.DVHROIContributionType = "INCLUDED"
    roi.ReferencedROINumber = str(number)
    item = Dataset()
    item.DVHType = "CUMULATIVE"
    item.DoseUnits = "GY"
    item.DoseType = dose_type
    item.DVHDoseScaling = "1"
    item.DVHVolumeUnits = "CM3"
    item.DVHNumberOfBins = str(len(volumes_cm3))
    width = number_text(width_gy)
    item.DVHData = [text for volume in volumes_cm3 for text in (width, number_text(volume))]
    item.DVHReferencedROISequence = [roi]
    item.DVHMinimumDose = number_text(max(found.minimum_gy, 0.0))
    item.DVHMaximumDose = number_text(max(found.maximum_gy, 0.0))
    item.DVHMeanDose = number_text(found.mean_gy)
    return item
