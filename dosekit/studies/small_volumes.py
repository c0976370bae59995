"""The small verbs about volumes: a look at one, a phantom as DICOM, other star yields on a finished map."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING

from dosekit.caution import BANNER
from dosekit.errors import OutputError
from dosekit.studies.places import made_folder

if TYPE_CHECKING:
    from dosekit.grids.voxels import VoxelGrid

__all__ = [
    "describe_volume",
    "export_phantom",
    "known_names",
    "reweigh_file",
    "write_look",
]

_HASH_OF_NO_RUN = "not part of a run"


def describe_volume(
    volume: str,
    *,
    structures: Path | None = None,
    series: str | None = None,
    resample: bool = False,
    progress: Callable[[str, float], None] | None = None,
) -> tuple[VoxelGrid, str]:
    """Read a CT folder or a phantom and say what is in it, without any identity.

    Parameters
    ----------
    volume : str
        A CT folder, or a phantom by name or file.
    structures : Path, optional
        DICOM structure set.
    series : str, optional
        Which series of the folder.
    resample : bool
        Resample uneven or tilted slices.
    progress : callable, optional
        Told how far reading is.

    Returns
    -------
    grid : VoxelGrid
        The volume.
    text : str
        Geometry, densities and structures.
    """
    path = Path(volume)
    if path.is_dir():
        from dosekit.grids.ct import read_ct

        def tell(done: int, total: int) -> None:
            if progress is not None:
                progress("reading the CT", done / max(total, 1))

        grid = read_ct(path, structures=structures, series=series, resample=resample, progress=tell)
    else:
        from dosekit.grids.phantoms import phantom

        grid = phantom(volume)
    nz, ny, nx = grid.shape
    low, high = grid.lower_mm, grid.upper_mm
    lightest, densest = float(grid.density_g_cm3.min()), float(grid.density_g_cm3.max())
    lines = [
        f"{grid.name or 'volume'}: {nx} x {ny} x {nz} voxels of "
        + " x ".join(f"{step:.4g}" for step in grid.spacing_mm)
        + f" mm, patient position {grid.patient_position}",
        "  from " + " ".join(f"{value:9.2f}" for value in low) + " mm (x y z, LPS)",
        "  to   " + " ".join(f"{value:9.2f}" for value in high) + " mm",
        f"  density {lightest:.4g} to {densest:.4g} g/cm3, {len(grid.materials)} compositions",
    ]
    if grid.hu is not None:
        lines.append(f"  HU {int(grid.hu.min())} to {int(grid.hu.max())}")
    lines += [
        f"  structure {name!r} ({grid.role(name).replace('_', ' ')}): {grid.volume_cm3(name):.1f} cm3"
        for name in grid.structures
    ]
    if not grid.structures:
        lines.append("  no structures")
    lines.append(BANNER)
    return grid, "\n".join(lines)


def write_look(grid: VoxelGrid, folder: str | Path) -> list[Path]:
    """Write a picture of three planes of a volume.

    Parameters
    ----------
    grid : VoxelGrid
        The volume.
    folder : str or Path
        Where.

    Returns
    -------
    list of Path
        The files.
    """
    from dosekit.outputs.figures_volume import volume_figure
    from dosekit.outputs.style import write_figure

    targets = [name for name in grid.structures if grid.role(name) == "target"]
    files = write_figure(volume_figure(grid, target=targets[0] if targets else None), made_folder(folder) / "volume")
    return [files.pdf, files.png]


def known_names() -> str:
    """List what is known by name.

    Returns
    -------
    str
        Phantoms, shipped studies, materials and beam particles.
    """
    from dosekit.basis.materials import material_names
    from dosekit.beams.beam import BEAM_SPECIES
    from dosekit.grids.phantoms import phantom_names
    from dosekit.studies.shipped import shipped_names

    groups = {
        "phantoms": phantom_names(),
        "studies": shipped_names(),
        "beam particles": BEAM_SPECIES,
        "materials": material_names(),
    }
    return "\n".join(f"{title}\n  " + "\n  ".join(names) for title, names in groups.items())


def export_phantom(name: str, folder: str | Path, *, spacing_mm: float | None = None) -> int:
    """Write a phantom as a CT series with its structure set.

    Parameters
    ----------
    name : str
        Name or file of the phantom.
    folder : str or Path
        Where; must be empty or not exist.
    spacing_mm : float, optional
        Voxel size, mm.

    Returns
    -------
    int
        Number of slices.
    """
    from dosekit.grids.phantoms import phantom
    from dosekit.outputs.dicom_ct import write_ct_series
    from dosekit.outputs.dicom_reference import reference_of
    from dosekit.outputs.dicom_structures import write_structure_set
    from dosekit.outputs.files import sha256_of_bytes

    grid = phantom(name, spacing_mm)
    where = made_folder(folder)
    if any(where.iterdir()):
        raise OutputError(f"{where.name} is not empty", remedy="name a new folder")
    key = sha256_of_bytes(f"{grid.name} {grid.shape} {grid.spacing_mm} {grid.origin_mm}".encode())
    reference = reference_of(grid, run_hash=key)
    slices = write_ct_series(where, grid, run_hash=key, reference=reference)
    if grid.structures:
        write_structure_set(where / "structures.dcm", grid, reference=reference, run_hash=key)
    return len(slices)


def reweigh_file(
    folder: str | Path,
    out: str | Path,
    *,
    star_scale: float | None = None,
    yields: str | None = None,
    beside: str | Path = ".",
) -> str:
    """Change star yields on a finished run without folding again.

    Parameters
    ----------
    folder : str or Path
        Folder of the run.
    out : str or Path
        NetCDF to write; must not exist.
    star_scale : float, optional
        Another factor on the charged star energy.
    yields : str, optional
        Another yield set; the stops are then carried anew through the run's volume.
    beside : str or Path
        Folder that paths in the run's study are relative to.

    Returns
    -------
    str
        What changed, in a line.

    Raises
    ------
    OutputError
        If the file to be written exists.
    """
    from dosekit.maps.stars_reweight import reweight
    from dosekit.outputs.netcdf import read_dataset, write_dataset
    from dosekit.outputs.record import read_record
    from dosekit.studies.model import parse_study
    from dosekit.studies.volume import load_volume

    where = Path(folder)
    if Path(out).exists():
        raise OutputError(f"{Path(out).name} exists", remedy="choose another name")
    record = read_record(where / "record.json")
    before = read_dataset(where / "dose.nc")
    grid = None
    if yields is not None and yields != before.attrs.get("yields"):
        grid, _ = load_volume(parse_study(record.study_text), Path(beside))
    after = reweight(before, grid, star_scale=star_scale, yields=yields)
    # effect and LET belong to the old shares of the components
    after = after.drop_vars([name for name in ("effect_dose", "let", "let_by_component") if name in after])
    write_dataset(after, out, run_hash=record.run_hash, title=str(before.attrs.get("title", "")))
    old, new = (float(item["dose"].sum("component").max()) for item in (before, after))
    return f"largest dose {old:.4g} Gy before, {new:.4g} Gy after; wrote {Path(out).name}. {BANNER}"
