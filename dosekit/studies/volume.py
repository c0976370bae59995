"""Turn the volume, target and organ sections of a study into a voxel volume with its structures."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING

from dosekit.errors import GridError, StudyError
from dosekit.studies.model import Study, axis_triple

if TYPE_CHECKING:
    from dosekit.grids.voxels import VoxelGrid

__all__ = ["SPHERE_TARGET", "existing", "input_files", "load_volume"]

SPHERE_TARGET = "target sphere"
"""Name of a target that the study gives as a sphere."""


def load_volume(
    study: Study, folder: Path, *, progress: Callable[[str, float], None] | None = None
) -> tuple[VoxelGrid, str]:
    """Load the volume of a study and find its target.

    Parameters
    ----------
    study : Study
        The study.
    folder : Path
        What paths in the study are relative to.
    progress : callable, optional
        Told what is being read and how far it is, 0 to 1.

    Returns
    -------
    grid : VoxelGrid
        The volume, target and organs among its structures.
    target : str
        Name of the target's structure.

    Raises
    ------
    StudyError
        If a named file or folder is absent.
    InputError
        If the volume cannot be used, or has no such structure.
    """
    said = study.volume
    if said.phantom is not None:
        from dosekit.grids.phantoms import phantom

        own = folder / said.phantom
        name = own if said.phantom.endswith(".toml") else said.phantom
        grid = phantom(name, None if said.spacing_mm is None else axis_triple(said.spacing_mm))
    else:
        grid = _read_ct(study, folder, progress)
    if said.crop_mm is not None:
        grid = grid.crop(*said.crop_mm)
    if study.target.sphere is not None:
        sphere = study.target.sphere
        grid = grid.with_sphere(SPHERE_TARGET, sphere.centre_mm, sphere.radius_mm)
        target = SPHERE_TARGET
    else:
        target = grid.structure_name(str(study.target.structure))
    for organ in study.organ:
        grid.structure_name(organ.structure)
    if grid.volume_cm3(target) <= 0.0:
        raise GridError(f"target {target!r} has no volume inside the grid", remedy="check the target and the crop")
    return grid, target


def _read_ct(study: Study, folder: Path, progress: Callable[[str, float], None] | None) -> VoxelGrid:
    """Read the CT of a study."""
    from dosekit.grids.calibration import read_calibration
    from dosekit.grids.ct import read_ct

    said = study.volume
    ct = existing(folder, str(said.ct), "volume.ct")
    structures = None if said.structures is None else existing(folder, said.structures, "volume.structures")
    calibration = None
    if said.calibration is not None:
        calibration = read_calibration(existing(folder, said.calibration, "volume.calibration"))

    def tell(done: int, total: int) -> None:
        if progress is not None:
            progress("reading the CT", done / max(total, 1))

    grid = read_ct(
        ct,
        structures=structures,
        series=said.series,
        calibration=calibration,
        overrides=dict(said.overrides) or None,
        resample=said.resample,
        remove_couch=said.remove_couch,
        progress=tell,
    )
    return grid if said.spacing_mm is None else grid.resample(axis_triple(said.spacing_mm))


def existing(folder: Path, said: str, key: str) -> Path:
    """Return a path of the study, which must exist.

    Parameters
    ----------
    folder : Path
        What it is relative to.
    said : str
        The path as the study gives it.
    key : str
        The key that gives it, for the message.

    Returns
    -------
    Path
        The path.

    Raises
    ------
    StudyError
        If there is nothing.
    """
    path = folder / said
    if not path.exists():
        raise StudyError(
            f"{key} names {said!r}, which does not exist beside the study file",
            remedy="give a path that is right from the study file's folder",
        )
    return path


def input_files(study: Study, folder: Path) -> list[Path]:
    """Return the files a study reads besides itself, sorted by name.

    Parameters
    ----------
    study : Study
        The study.
    folder : Path
        What its paths are relative to.

    Returns
    -------
    list of Path
        Files; a CT folder gives all regular files in it.
    """
    found: list[Path] = []
    said = study.volume
    if said.phantom is not None:
        from dosekit.grids.phantoms import phantom_folder

        own = folder / said.phantom
        found.append(own if said.phantom.endswith(".toml") else phantom_folder() / f"{said.phantom}.toml")
    for entry in (said.ct, said.structures, said.calibration):
        if entry is None:
            continue
        path = folder / entry
        if path.is_dir():
            found += sorted(item for item in path.rglob("*") if item.is_file())
        else:
            found.append(path)
    return found
