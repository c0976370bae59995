"""What may a study file say?

A study is a TOML file: volume, target, organs, beam, fields, goal, effect, stars, machine, outputs. It is
validated whole before anything is computed; a key that is not known is refused and the nearest known key named.
Paths are relative to the study file.
"""

from __future__ import annotations

import math
import tomllib
from difflib import get_close_matches
from pathlib import Path
from typing import Any, Literal, Self

from pydantic import BaseModel, ConfigDict, Field, ValidationError, model_validator

from dosekit.errors import StudyError

__all__ = [
    "BeamSection",
    "ComparisonSection",
    "EffectSection",
    "FieldSection",
    "GoalSection",
    "ImportedSection",
    "MachineSection",
    "OrganSection",
    "OutputsSection",
    "RobustSection",
    "SphereSection",
    "StarsSection",
    "Study",
    "TargetSection",
    "VolumeSection",
    "parse_study",
    "read_study",
]

Point = tuple[float, float, float]
Pair = tuple[float, float]


class _Section(BaseModel):
    """A section that refuses unknown keys, infinities and NaN."""

    model_config = ConfigDict(extra="forbid", frozen=True, allow_inf_nan=False, str_strip_whitespace=True)


class SphereSection(_Section):
    """A sphere given in the study itself."""

    centre_mm: Point
    radius_mm: float = Field(gt=0, le=300)


class VolumeSection(_Section):
    """Where dose is asked for: a phantom by name or file, or a CT folder with its structures."""

    phantom: str | None = None
    ct: str | None = None
    structures: str | None = None
    series: str | None = None
    calibration: str | None = None
    spacing_mm: float | tuple[float, float, float] | None = None
    crop_mm: tuple[Point, Point] | None = None
    overrides: dict[str, str] = Field(default_factory=dict)
    resample: bool = False
    remove_couch: bool = False

    @model_validator(mode="after")
    def _one_of(self) -> Self:
        if (self.phantom is None) == (self.ct is None):
            msg = "give either 'phantom' (a name or a file) or 'ct' (a folder), not both"
            raise ValueError(msg)
        if self.phantom is not None and (self.structures or self.series or self.calibration):
            msg = "'structures', 'series' and 'calibration' belong to a CT, not to a phantom"
            raise ValueError(msg)
        return self


class TargetSection(_Section):
    """The target: a structure of the volume, or a sphere."""

    structure: str | None = None
    sphere: SphereSection | None = None

    @model_validator(mode="after")
    def _one_of(self) -> Self:
        if (self.structure is None) == (self.sphere is None):
            msg = "give either 'structure' or 'sphere', not both"
            raise ValueError(msg)
        return self


class OrganSection(_Section):
    """An organ at risk and, in a three-dimensional goal, what it may receive per fraction (Gy, as the goal)."""

    structure: str
    maximum_gy: float | None = Field(default=None, ge=0)
    mean_gy: float | None = Field(default=None, ge=0)
    weight: float = Field(default=1.0, gt=0)


class BeamSection(_Section):
    """The beam, as an experimenter knows it; without a momentum it is chosen to reach the target's far side."""

    particle: Literal["pi-", "pi+", "mu-", "mu+", "proton"] = "pi-"
    momentum_mev_c: float | None = Field(default=None, gt=0, le=3000)
    kinetic_energy_mev: float | None = Field(default=None, gt=0, le=1000)
    momentum_sigma: float | None = Field(default=None, ge=0, le=0.2)
    momentum_fwhm: float | None = Field(default=None, ge=0, le=0.5)
    spot_sigma_mm: float | Pair = 5.0
    divergence_sigma_mrad: float | Pair = 0.0
    correlation: float | Pair = 0.0
    contaminants: dict[str, float] = Field(default_factory=dict)
    range_shifter: tuple[str, float] | None = None
    range_shifter_gap_mm: float = Field(default=0.0, ge=0, le=2000)

    @model_validator(mode="after")
    def _consistent(self) -> Self:
        if self.momentum_mev_c is not None and self.kinetic_energy_mev is not None:
            msg = "give 'momentum_mev_c' or 'kinetic_energy_mev', not both"
            raise ValueError(msg)
        if self.momentum_sigma is not None and self.momentum_fwhm is not None:
            msg = "give 'momentum_sigma' or 'momentum_fwhm', not both"
            raise ValueError(msg)
        return self


class FieldSection(_Section):
    """One field: where it comes from and how finely it is made."""

    name: str = Field(min_length=1, max_length=32)
    gantry_deg: float = Field(default=0.0, ge=-360, le=360)
    couch_deg: float = Field(default=0.0, ge=-360, le=360)
    isocentre_mm: Point | None = None
    source_distance_mm: float | None = Field(default=None, gt=200, le=100000)
    spot_spacing_mm: float = Field(default=6.0, gt=0.5, le=50)
    margin_mm: float = Field(default=8.0, ge=0, le=50)
    step_mm: float = Field(default=6.0, gt=0.5, le=50)
    beam: BeamSection | None = None


class RobustSection(_Section):
    """Errors that weights found in three dimensions should stand: of range and of position."""

    range_percent: float = Field(default=3.0, ge=0, le=20)
    position_mm: float = Field(default=3.0, ge=0, le=20)
    join: Literal["worst", "expectation"] = "worst"


class GoalSection(_Section):
    """What the settings are to reach."""

    dose_gy: float = Field(default=2.0, gt=0, le=200)
    fractions: int = Field(default=1, ge=1, le=100)
    quantity: Literal["physical", "effect"] = "physical"
    weights: Literal["range_steps", "each_field", "all_fields"] = "range_steps"
    iterations: int = Field(default=60, ge=1, le=2000)
    surround_mm: float = Field(default=10.0, ge=0, le=100)
    surround_weight: float = Field(default=0.2, ge=0, le=100)
    robust: RobustSection | None = None


class EffectSection(_Section):
    """How dose becomes effect."""

    model: str = "constant"
    alpha_beta_gy: float = Field(default=10.0, gt=0, le=100)
    alpha_per_gy: float = Field(default=0.3, gt=0, le=10)
    factors: dict[str, float] = Field(default_factory=dict)


class StarsSection(_Section):
    """Which star yields, and the documented scale factor on their charged energy."""

    yields: Literal["evaluated", "cascade"] = "evaluated"
    scale: float = Field(default=1.0, ge=0.5, le=1.5)


class MachineSection(_Section):
    """What the times in the settings table rest on."""

    particles_per_s: float = Field(default=1.0e8, gt=0)


class ImportedSection(_Section):
    """A depth curve of another particle, brought in as CSV with its source in the file."""

    file: str
    name: str | None = None


class ComparisonSection(_Section):
    """Other particles for the same anatomy and goals; momentum, weights and effect are found anew for each."""

    particles: tuple[Literal["pi-", "pi+", "mu-", "mu+", "proton"], ...] = Field(default=(), max_length=4)
    curve: tuple[ImportedSection, ...] = ()


class OutputsSection(_Section):
    """What is written."""

    dose_spacing_mm: float | tuple[float, float, float] | None = None
    dose_to: Literal["medium", "water"] = "medium"
    let_by_component: bool = False
    figures: bool = True
    dicom: bool = True
    dicom_volume: bool = True
    secondary_capture: bool = False
    anonymous: bool = False
    report: bool = True


class Study(_Section):
    """A whole study."""

    title: str = Field(min_length=1, max_length=200)
    volume: VolumeSection
    target: TargetSection
    organ: tuple[OrganSection, ...] = ()
    beam: BeamSection = Field(default_factory=BeamSection)
    field: tuple[FieldSection, ...] = Field(min_length=1, max_length=12)
    goal: GoalSection = Field(default_factory=GoalSection)
    effect: EffectSection = Field(default_factory=EffectSection)
    stars: StarsSection = Field(default_factory=StarsSection)
    machine: MachineSection = Field(default_factory=MachineSection)
    comparison: ComparisonSection = Field(default_factory=ComparisonSection)
    outputs: OutputsSection = Field(default_factory=OutputsSection)

    @model_validator(mode="after")
    def _distinct(self) -> Self:
        names = [file_name(section.name) for section in self.field]
        if len(set(names)) != len(names):
            msg = "two fields have the same name, or names that would give the same file name"
            raise ValueError(msg)
        return self

    def beam_of(self, section: FieldSection) -> BeamSection:
        """Return a field's own beam, or the study's.

        Parameters
        ----------
        section : FieldSection
            One of the fields.

        Returns
        -------
        BeamSection
            The beam.
        """
        return self.beam if section.beam is None else section.beam


def read_study(path: str | Path) -> tuple[Study, str]:
    """Read and validate a study file.

    Parameters
    ----------
    path : str or Path
        The TOML file.

    Returns
    -------
    study : Study
        The validated study.
    text : str
        The text as read.

    Raises
    ------
    StudyError
        If the file is absent, is not TOML, or says something that is not allowed.
    """
    file = Path(path)
    try:
        if file.stat().st_size > 1_000_000:
            raise StudyError(f"{file.name} has {file.stat().st_size} bytes", allowed="at most 1 MB for a study file")
        text = file.read_text(encoding="utf-8")
    except UnicodeDecodeError as error:
        raise StudyError(f"{file.name} is not UTF-8 text", remedy="save the study as UTF-8") from error
    except OSError as error:
        raise StudyError(
            f"{file.name} cannot be read ({error.strerror or type(error).__name__})",
            remedy="name a study file; 'dosekit new' writes one to start from",
        ) from error
    return parse_study(text, name=file.name), text


def parse_study(text: str, *, name: str = "study") -> Study:
    """Validate the text of a study.

    Parameters
    ----------
    text : str
        TOML.
    name : str
        What to call it in messages.

    Returns
    -------
    Study
        The study.

    Raises
    ------
    StudyError
        If it is not TOML or says something that is not allowed.
    """
    try:
        raw = tomllib.loads(text)
    except (tomllib.TOMLDecodeError, RecursionError) as error:
        raise StudyError(f"{name} is not TOML: {error}", remedy="mend the line named") from error
    try:
        return Study.model_validate(raw)
    except ValidationError as error:
        raise StudyError(
            f"{name}: " + "; ".join(_explain(item) for item in _telling(error.errors())[:6]),
            remedy="mend the study file; 'dosekit new' shows every key with a comment",
        ) from error


def _telling(items: Any) -> list[Any]:
    """Leave out "too short" complaints about a list whose members are at fault themselves."""
    places = {item["loc"][0] for item in items if len(item["loc"]) > 1}
    return [item for item in items if not (item["type"] == "too_short" and item["loc"][0] in places)]


def _explain(item: Any) -> str:
    """Say one validation error in plain words."""
    steps = [str(step + 1) if isinstance(step, int) else str(step) for step in item["loc"] if not _is_branch(step)]
    where = ".".join(steps) or "the study"
    if item["type"] == "extra_forbidden":
        known = _known_keys(item["loc"][:-1])
        near = get_close_matches(str(item["loc"][-1]), known, n=1, cutoff=0.4)
        hint = f"; did you mean '{near[0]}'?" if near else f" (known here: {', '.join(known)})"
        return f"unknown key '{where}'{hint}"
    if item["type"] == "missing":
        return f"'{where}' is missing"
    given = item.get("input")
    shown = "" if isinstance(given, dict | list | tuple) else f" (found {given!r})"
    return f"'{where}': {str(item['msg']).removeprefix('Value error, ')}{shown}"


def _is_branch(step: object) -> bool:
    """Tell whether a location step is only the branch of a union tried by the validator."""
    return isinstance(step, str) and ("[" in step or step in ("float", "int", "str"))


def _known_keys(location: tuple[Any, ...]) -> list[str]:
    """Return the keys known at a place in the study."""
    model: type[BaseModel] = Study
    for step in location:
        if isinstance(step, int) or _is_branch(step):
            continue
        found = model.model_fields.get(str(step))
        if found is None:
            return []
        for candidate in _models_in(found.annotation):
            model = candidate
    return sorted(model.model_fields)


def _models_in(annotation: Any) -> list[type[BaseModel]]:
    """Return the section classes inside a type annotation."""
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return [annotation]
    return [model for inner in getattr(annotation, "__args__", ()) for model in _models_in(inner)]


def file_name(name: str) -> str:
    """Return a name as part of a file name: lower case letters and digits, the rest as underscores.

    Parameters
    ----------
    name : str
        Name of a field.

    Returns
    -------
    str
        The part.

    Examples
    --------
    >>> file_name("left lateral")
    'left_lateral'
    """
    return "".join(letter if letter.isalnum() else "_" for letter in name.lower())


def axis_triple(value: float | tuple[float, float, float]) -> tuple[float, float, float]:
    """Return one spacing per axis.

    Parameters
    ----------
    value : float or triple of float
        One spacing for all axes, or one for each, mm.

    Returns
    -------
    triple of float
        x, y, z spacing, mm.

    Raises
    ------
    StudyError
        If a spacing is not above zero.
    """
    triple = (value, value, value) if isinstance(value, int | float) else value
    if not all(math.isfinite(item) and item > 0 for item in triple):
        raise StudyError(f"spacing {value!r} mm", allowed="numbers above 0")
    return (float(triple[0]), float(triple[1]), float(triple[2]))
