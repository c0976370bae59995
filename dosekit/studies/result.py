"""What a finished run is in memory, before anything is written."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    import numpy as np
    import xarray as xr
    from numpy.typing import NDArray

    from dosekit.effects.histograms import VolumeHistogram
    from dosekit.grids.voxels import VoxelGrid
    from dosekit.modulation.weights import FoundWeights
    from dosekit.outputs.record import InputFile
    from dosekit.outputs.summary import RunSummary
    from dosekit.studies.model import Study
    from dosekit.studies.planning import PlannedField

__all__ = ["Result"]


@dataclass(frozen=True)
class Result:
    """All that a run found.

    Attributes
    ----------
    study : Study
        The study.
    grid : VoxelGrid
        The volume.
    target : str
        Name of the target's structure.
    planned : tuple of PlannedField
        The fields with their final weights.
    per_field : dict of str to Dataset
        Dose of each field, ``dose(component, z, y, x)`` in Gy per fraction, and ``stops(z, y, x)``.
    dose : Dataset
        The sum of the fields.
    effect_dose_gy : ndarray
        Effect-weighted dose per fraction, [z, y, x], Gy.
    histograms : mapping of str to VolumeHistogram
        Volume histograms of physical dose by structure.
    effect_histograms : mapping of str to VolumeHistogram
        Those of effect-weighted dose.
    summary : RunSummary
        What a reader wants to know first.
    inputs : tuple of InputFile
        The input files, hashed.
    run_hash : str
        Hash of study, inputs and version.
    line : str
        The one line for the console.
    scale : float
        What the first weights were multiplied by to reach the prescribed mean target dose.
    searches : tuple of FoundWeights
        The searches for weights in three dimensions, where the study asks for them.
    warnings : tuple of str
        What was warned of.
    others : tuple of Result
        The same study with other particles, where it asks for a comparison.
    base : Path
        Folder that paths in the study are relative to.
    """

    study: Study
    grid: VoxelGrid
    target: str
    planned: tuple[PlannedField, ...]
    per_field: Mapping[str, xr.Dataset]
    dose: xr.Dataset
    effect_dose_gy: NDArray[np.float32]
    histograms: Mapping[str, VolumeHistogram]
    effect_histograms: Mapping[str, VolumeHistogram]
    summary: RunSummary
    inputs: tuple[InputFile, ...]
    run_hash: str
    line: str
    scale: float
    searches: tuple[FoundWeights, ...] = ()
    warnings: tuple[str, ...] = ()
    others: tuple[Result, ...] = ()
    base: Path = Path()

    def maps(self) -> xr.Dataset:
        """Return the dose map with the effect-weighted dose beside it.

        Returns
        -------
        Dataset
            ``dose(component, z, y, x)``, stops, LET, and ``effect_dose(z, y, x)`` in Gy per fraction.
        """
        dataset = self.dose.copy()
        dataset["effect_dose"] = (
            ("z", "y", "x"),
            self.effect_dose_gy,
            {"units": "Gy", "long_name": f"effect-weighted dose, model {self.study.effect.model}"},
        )
        dataset.attrs["study"] = self.study.title
        dataset.attrs["dose_per"] = "fraction"
        return dataset
