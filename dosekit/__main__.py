"""The command line: one function per verb, each a thin layer over a plain function of the package.

Exit status: 0 done; 1 results could not be written or something unforeseen happened; 2 the input is at fault.
"""

from __future__ import annotations

import sys
import warnings
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import click

from dosekit import __version__
from dosekit.caution import BANNER, CAUTION
from dosekit.errors import DosekitWarning, InputError, OutputError

__all__ = ["main"]


@click.group(context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100}, epilog=CAUTION)
@click.version_option(__version__, "-V", "--version", message=f"dosekit %(version)s - {BANNER}")
def cli() -> None:
    """Dose of charged mesons, chiefly negative pions, in phantoms and CT volumes - for research.

    RESEARCH ONLY - NOT FOR CLINICAL USE.
    """


@cli.command()
@click.argument("study", type=click.Path(path_type=Path))
@click.option("-o", "--out", type=click.Path(path_type=Path), help="Folder for the results [default: results_STUDY].")
@click.option("--anonymous", is_flag=True, help="Replace patient identifiers in the DICOM objects.")
@click.option("-q", "--quiet", is_flag=True, help="No progress, no closing lines; warnings and errors only.")
def run(study: Path, out: Path | None, anonymous: bool, quiet: bool) -> None:
    """Run a whole STUDY (a TOML file, or the name of a shipped one): dose, settings, figures, DICOM, record."""
    from dosekit.studies.pipeline import run as run_study
    from dosekit.studies.shipped import study_path

    path = study_path(study)
    folder = out if out is not None else Path(f"results_{path.stem}")
    with _progress(quiet) as tell:
        result = run_study(path, folder, anonymous=anonymous or None, progress=tell)
    if not quiet:
        click.echo(result.line)
        click.echo(f"results: {folder}")


@cli.command()
@click.argument("record", type=click.Path(path_type=Path))
@click.option("-o", "--out", type=click.Path(path_type=Path), required=True, help="Folder for the repeated results.")
@click.option(
    "--beside", type=click.Path(path_type=Path), default=Path(), help="Folder that paths in the study are relative to."
)
@click.option("-q", "--quiet", is_flag=True, help="No progress.")
def repeat(record: Path, out: Path, beside: Path, quiet: bool) -> None:
    """Repeat a run from its RECORD (record.json) and say whether every output has the same bytes."""
    from dosekit.studies.repeating import repeat as repeat_run

    with _progress(quiet) as tell:
        report = repeat_run(record, out, beside=beside, progress=tell)
    click.echo(report.text)
    if report.different:
        raise OutputError(
            f"{len(report.different)} outputs differ: {', '.join(report.different)}",
            remedy="compare the versions listed in both records",
        )


@cli.command()
@click.option("-p", "--particle", default="pi-", show_default=True, help="pi-, pi+, mu-, mu+, proton or e-.")
@click.option("-m", "--momentum", type=float, required=True, metavar="MEV/C", help="Mean momentum.")
@click.option("-s", "--spread", type=float, default=0.02, show_default=True, help="Sigma of momentum over momentum.")
@click.option(
    "--medium", default="water", show_default=True, help="A material, or layers as 'muscle_skeletal:50,water:300' (mm)."
)
@click.option("--muons", type=float, default=0.0, help="Muons per beam particle at the surface.")
@click.option("--electrons", type=float, default=0.0, help="Electrons per beam particle at the surface.")
@click.option("--yields", type=click.Choice(["evaluated", "cascade"]), default="evaluated", show_default=True)
@click.option("--bin", "bin_mm", type=float, default=1.0, show_default=True, metavar="MM", help="Depth bin.")
@click.option("-o", "--out", type=click.Path(path_type=Path), help="Write curve.csv and the figure into this folder.")
@click.option("-q", "--quiet", is_flag=True, help="No summary on the console.")
def curve(**given: Any) -> None:
    """Compute a depth curve with every part of the dose kept apart."""
    from dosekit.studies.small_curves import curve_summary, depth_curve_of, write_curve

    dataset = depth_curve_of(
        given["particle"],
        given["momentum"],
        spread=given["spread"],
        medium=given["medium"],
        contaminants=_contaminants(given["particle"], given["muons"], given["electrons"]),
        yields=given["yields"],
        bin_mm=given["bin_mm"],
    )
    if not given["quiet"]:
        click.echo(curve_summary(dataset))
    if given["out"] is not None:
        for path in write_curve(dataset, given["out"]):
            click.echo(str(path))


@cli.command()
@click.option("-p", "--particle", default="pi-", show_default=True)
@click.option("-m", "--momentum", type=float, metavar="MEV/C", help="Mean momentum [default: just enough].")
@click.option("-s", "--spread", type=float, default=0.02, show_default=True, help="Sigma of momentum over momentum.")
@click.option("--from", "near_mm", type=float, required=True, metavar="MM", help="Near side of the interval in water.")
@click.option("--to", "far_mm", type=float, required=True, metavar="MM", help="Far side of the interval in water.")
@click.option("--step", "step_mm", type=float, default=5.0, show_default=True, metavar="MM", help="Range step.")
@click.option("--flatten", type=click.Choice(["physical", "effect"]), default="physical", show_default=True)
@click.option("--rate", type=float, default=1.0e8, show_default=True, help="Particles per second, for times.")
@click.option("-o", "--out", type=click.Path(path_type=Path), help="Write the table and figure into this folder.")
def steps(**given: Any) -> None:
    """Find range steps and weights that make dose flat over a depth interval in water."""
    from dosekit.studies.small_steps import range_steps_of, steps_summary, write_steps

    result = range_steps_of(**{key: value for key, value in given.items() if key != "out"})
    click.echo(steps_summary(result))
    if given["out"] is not None:
        for path in write_steps(result, given["out"]):
            click.echo(str(path))


@cli.command()
@click.argument("volume")
@click.option("--structures", type=click.Path(path_type=Path), help="DICOM structure set.")
@click.option("--series", help="Which series, where a folder holds several.")
@click.option("--resample", is_flag=True, help="Resample uneven or tilted slices.")
@click.option("-o", "--out", type=click.Path(path_type=Path), help="Write a picture of three planes into this folder.")
@click.option("-q", "--quiet", is_flag=True, help="No progress.")
def look(
    volume: str, structures: Path | None, series: str | None, resample: bool, out: Path | None, quiet: bool
) -> None:
    """Look at a VOLUME: a CT folder, or a phantom by name or file."""
    from dosekit.studies.small_volumes import describe_volume, write_look

    with _progress(quiet) as tell:
        grid, text = describe_volume(volume, structures=structures, series=series, resample=resample, progress=tell)
    click.echo(text)
    if out is not None:
        for path in write_look(grid, out):
            click.echo(str(path))


@cli.command()
@click.argument("data", type=click.Path(path_type=Path))
@click.option("-p", "--particle", default="pi-", show_default=True)
@click.option("-m", "--momentum", type=float, required=True, metavar="MEV/C", help="First guess of the momentum.")
@click.option("--medium", default="water", show_default=True)
@click.option("--offset", is_flag=True, help="Fit the zero of depth too; it nearly stands for the momentum.")
@click.option("-o", "--out", type=click.Path(path_type=Path), help="Write result and figure into this folder.")
def fit(data: Path, particle: str, momentum: float, medium: str, offset: bool, out: Path | None) -> None:
    """Fit a beam to measured DATA: a CSV of depth_mm and relative dose."""
    from dosekit.studies.small_curves import fit_summary, fit_to_file, write_fit

    result = fit_to_file(data, particle=particle, momentum_mev_c=momentum, medium=medium, offset=offset)
    click.echo(fit_summary(result))
    if out is not None:
        for path in write_fit(result, out):
            click.echo(str(path))


@cli.command()
@click.argument("path", type=click.Path(path_type=Path), default=Path("study.toml"))
def new(path: Path) -> None:
    """Write a commented study to start from at PATH [default: study.toml]."""
    from dosekit.studies.shipped import write_new_study

    write_new_study(path)
    click.echo(f"wrote {path}; next: dosekit run {path}")


@cli.command(name="list")
def list_names() -> None:
    """List what is known by name: phantoms, materials, particles, shipped studies."""
    from dosekit.studies.small_volumes import known_names

    click.echo(known_names())


@cli.command()
@click.argument("phantom")
@click.option("-o", "--out", type=click.Path(path_type=Path), required=True, help="Folder for the DICOM files.")
@click.option("--spacing", type=float, metavar="MM", help="Voxel size [default: the phantom's own].")
def export(phantom: str, out: Path, spacing: float | None) -> None:
    """Write a PHANTOM as a DICOM CT series with its structure set."""
    from dosekit.studies.small_volumes import export_phantom

    count = export_phantom(phantom, out, spacing_mm=spacing)
    click.echo(f"wrote {count} CT slices and a structure set to {out}. {BANNER}")


@cli.command()
@click.argument("folder", type=click.Path(path_type=Path))
@click.option("--star-scale", type=float, help="Another factor on the charged star energy.")
@click.option("--yields", type=click.Choice(["evaluated", "cascade"]), help="Another star yield set.")
@click.option(
    "--beside", type=click.Path(path_type=Path), default=Path(), help="Folder that paths in the study are relative to."
)
@click.option("-o", "--out", type=click.Path(path_type=Path), required=True, help="NetCDF file to write.")
def reweigh(folder: Path, star_scale: float | None, yields: str | None, beside: Path, out: Path) -> None:
    """Change star yields on a finished run's FOLDER without folding again."""
    from dosekit.studies.small_volumes import reweigh_file

    click.echo(reweigh_file(folder, out, star_scale=star_scale, yields=yields, beside=beside))


def _contaminants(particle: str, muons: float, electrons: float) -> dict[str, float]:
    """Name contaminants by the charge of the beam."""
    sign = "+" if particle in ("pi+", "mu+", "proton") else "-"
    pairs = {f"mu{sign}": muons, f"e{sign}": electrons}
    return {name: value for name, value in pairs.items() if value != 0.0}


@contextmanager
def _progress(quiet: bool) -> Iterator[Callable[[str, float], None] | None]:
    """Show what is being done, on the error stream, if someone is looking."""
    if quiet:
        yield None
        return
    if not sys.stderr.isatty():
        seen: set[str] = set()

        def plain(what: str, fraction: float) -> None:
            del fraction
            if what not in seen:
                seen.add(what)
                click.echo(f"  {what}", err=True)

        yield plain
        return
    from rich.console import Console
    from rich.progress import BarColumn, Progress, SpinnerColumn, TextColumn, TimeElapsedColumn

    columns = (SpinnerColumn(), TextColumn("{task.description}"), BarColumn(), TimeElapsedColumn())
    with Progress(*columns, console=Console(stderr=True)) as bar:
        tasks: dict[str, Any] = {}

        def tell(what: str, fraction: float) -> None:
            for name, task in tasks.items():
                if name != what:
                    bar.update(task, completed=1.0)
            if what not in tasks:
                tasks[what] = bar.add_task(what, total=1.0)
            bar.update(tasks[what], completed=min(fraction, 1.0))

        yield tell
        for task in tasks.values():
            bar.update(task, completed=1.0)


def main(arguments: list[str] | None = None) -> int:
    """Run the command line and return the exit status.

    Parameters
    ----------
    arguments : list of str, optional
        Words after ``dosekit``; those of the process by default.

    Returns
    -------
    int
        0 done, 1 not written or unforeseen, 2 input at fault.
    """
    warnings.showwarning = _show_warning
    warnings.simplefilter("ignore")
    warnings.simplefilter("default", DosekitWarning)
    try:
        outcome = cli.main(args=arguments, prog_name="dosekit", standalone_mode=False)
        return outcome if isinstance(outcome, int) else 0
    except click.exceptions.Abort:
        click.echo("stopped; nothing was left half-written", err=True)
        return 1
    except click.ClickException as error:
        error.show()
        return 2
    except InputError as error:
        click.echo(f"dosekit: {error}", err=True)
        return 2
    except OutputError as error:
        click.echo(f"dosekit: {error}", err=True)
        return 1
    except MemoryError:
        click.echo("dosekit: memory ran out. What to do: use a coarser grid or crop the volume.", err=True)
        return 1


def _show_warning(message: Warning | str, category: type[Warning], *_: object, **__: object) -> None:
    """Show a warning of ours as one line."""
    if issubclass(category, DosekitWarning):
        click.echo(f"warning: {message}", err=True)


if __name__ == "__main__":
    raise SystemExit(main())
