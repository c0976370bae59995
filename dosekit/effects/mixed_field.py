"""What is the effect of several kinds of radiation given together?

Components with doses ``D_c`` and constants ``alpha_c``, ``beta_c`` given in one fraction act as one
radiation with dose-averaged ``alpha`` and ``sqrt(beta)``::

    E = A + B^2,      A = sum of alpha_c D_c,      B = sum of sqrt(beta_c) D_c

Source: Zaider & Rossi, Radiat. Res. 83 (1980) 732.  The photon dose of equal effect, given in as many
fractions, is the effect-weighted dose ``X`` per fraction::

    alpha_x X + beta_x X^2 = E    =>    X = 2 E / (alpha_x + sqrt(alpha_x^2 + 4 beta_x E))

``A`` and ``B`` are linear in the particles, so an optimiser needs two linear maps and the slopes ``dX/dA =
s`` and ``dX/dB = 2 B s`` with ``s = 1 / (alpha_x + 2 beta_x X)``.

Models by name
--------------
``constant``
    one factor ``f_c`` for each component: alpha_c = f_c alpha_x and sqrt(beta_c) = f_c sqrt(beta_x), so
    that ``X`` is exactly the sum of ``f_c D_c`` at any dose.
``physical``
    all factors 1.
``icrp60``
    factors Q(L), averaged over the component's dose: dose equivalent of radiation protection, no treatment effect.
``carabe``, ``wedenberg``, ``mcnamara``, ``rorvik_linear``
    the proton model for `primary`, `star_light` and `contaminant_muon`, the microdosimetric form for
    `in_flight`, `star_heavy` and `star_neutron` (they hold helium ions and recoils, far beyond the proton
    data), photons' constants for `star_photon`, `decay` and `contaminant_electron`.
``microdosimetric``
    the microdosimetric form for all of these but the last three.

Star and reaction products have a wide spread of LET: alpha and Q, which bend with LET, are averaged over the dose of
each such component (`dosekit.effects.let_spectra`); the proton models rise in proportion to LET and need its mean only.

Validity: each model's own; the proton models extrapolate wherever they are applied to pions and their
products.
"""

from __future__ import annotations

import warnings
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np

from dosekit.basis.components import COMPONENTS
from dosekit.effects.let_spectra import spectral_mean
from dosekit.effects.microdosimetry import saturated_alpha
from dosekit.effects.rbe import component_factors, proton_model_names, quality_factor, rbe_extremes
from dosekit.effects.tissues import Tissue, TissueMap, tissue
from dosekit.errors import InputError, UnknownNameError, ValidityWarning

if TYPE_CHECKING:
    from collections.abc import Mapping

    from numpy.typing import ArrayLike, NDArray

    Constants = dict[str, tuple[NDArray[np.float64], NDArray[np.float64]]]

__all__ = [
    "EffectModel",
    "effect_model_names",
    "effect_sums",
    "weighted_dose_gy",
    "weighted_dose_slopes",
]

_LIKE_PHOTONS = ("star_photon", "decay", "contaminant_electron")
_DENSE = ("in_flight", "star_heavy", "star_neutron")
_FACTOR_MODELS = ("physical", "constant", "icrp60")


def effect_model_names() -> tuple[str, ...]:
    """Give the names of the effect models."""
    return (*_FACTOR_MODELS, *proton_model_names(), "microdosimetric")


@dataclass(frozen=True)
class EffectModel:
    """An effect model with the tissue it is used for.

    Parameters
    ----------
    name : str
        One of `effect_model_names`.
    tissue : Tissue or TissueMap
        Photon constants; a map has the shape of the doses.
    factors : mapping of str to float
        Changes to the constant factors; only for ``constant``.
    beam_particle : str
        Species of the beam; the proton models warn for any other than ``proton``.
    spread_let : bool
        Average over the LET spectra of star and reaction products; otherwise every LET is that of all tracks (a
        curve of ions brought in under the name of a component).
    """

    name: str = "constant"
    tissue: Tissue | TissueMap = field(default_factory=lambda: tissue("tumour"))
    factors: Mapping[str, float] = field(default_factory=dict)
    beam_particle: str = "pi-"
    spread_let: bool = True

    def __post_init__(self) -> None:
        """Refuse unknown names and factors where there are none."""
        if self.name not in effect_model_names():
            raise UnknownNameError("effect model", self.name, effect_model_names())
        if self.factors and self.name != "constant":
            raise InputError(
                f"factors with the effect model {self.name!r}",
                allowed="factors only with 'constant'",
                remedy="leave the factors out or choose 'constant'",
            )
        component_factors(self.factors)

    @property
    def needs_let(self) -> bool:
        """Whether the LET of the components has to be given."""
        return self.name not in ("physical", "constant")

    def constants(self, let_kev_um: Mapping[str, ArrayLike] | None = None) -> Constants:
        """Give alpha (1/Gy) and sqrt(beta) (1/Gy) of every component.

        Parameters
        ----------
        let_kev_um : mapping of str to array_like, optional
            Dose-averaged LET of the components in keV/um.  A component left out is taken as photons; where a
            component has no dose its LET may be 0.

        Returns
        -------
        dict
            Component to (alpha, sqrt(beta)), each of the shape of the LET.

        Warns
        -----
        ValidityWarning
            A proton model for another beam; some LET or the tissue outside the span of the model.

        Examples
        --------
        >>> alpha, root = EffectModel("constant").constants()["star_heavy"]
        >>> round(float(alpha), 3), round(float(root) ** 2, 3)
        (0.9, 0.27)
        """
        given = dict(let_kev_um or {})
        for name in given:
            if name not in COMPONENTS:
                raise UnknownNameError("component", name, COMPONENTS)
        if self.needs_let and not given:
            raise InputError(
                f"no LET for the effect model {self.name!r}",
                allowed="the dose-averaged LET of each component",
                remedy="hand over the LET, or use 'constant'",
            )
        if self.name in proton_model_names() and self.beam_particle != "proton":
            warnings.warn(
                f"{self.name}: made for protons; for a beam of {self.beam_particle} and its products an extrapolation",
                ValidityWarning,
                stacklevel=2,
            )
        return {name: self._pair(name, given.get(name)) for name in COMPONENTS}

    def _pair(self, component: str, let: ArrayLike | None) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Give alpha and sqrt(beta) of one component."""
        alpha_x, root_x = self.tissue.alpha_per_gy, np.sqrt(self.tissue.beta_per_gy2)
        spread = component if self.spread_let else "primary"
        if self.name == "physical":
            factor = np.asarray(1.0)
        elif self.name == "constant":
            factor = np.asarray(component_factors(self.factors)[component])
        elif let is None or component in _LIKE_PHOTONS:
            factor = np.ones_like(np.asarray(0.0 if let is None else let, dtype=np.float64))
        elif self.name == "icrp60":
            factor = spectral_mean(quality_factor, spread, let, beam_particle=self.beam_particle)
        elif self.name == "microdosimetric" or component in _DENSE:
            alpha = saturated_alpha(let, tissue=self.tissue, component=spread, beam_particle=self.beam_particle)
            return alpha, np.broadcast_to(root_x, alpha.shape)
        else:
            largest, smallest = rbe_extremes(self.name, let, alpha_beta_gy=self.tissue.alpha_beta_gy)
            return largest * alpha_x, smallest * root_x
        return factor * alpha_x, factor * root_x

    def weighted_dose_gy(
        self, dose_gy: Mapping[str, ArrayLike], let_kev_um: Mapping[str, ArrayLike] | None = None, *, fractions: int = 1
    ) -> NDArray[np.float64]:
        """Give the effect-weighted dose of a mixed field.

        Parameters
        ----------
        dose_gy : mapping of str to array_like
            Dose of each component over all fractions, in Gy.
        let_kev_um : mapping of str to array_like, optional
            Dose-averaged LET of the components in keV/um.
        fractions : int
            Number of equal fractions.

        Returns
        -------
        ndarray
            Photon dose of equal effect in as many fractions, in Gy.

        Examples
        --------
        >>> EffectModel("constant").weighted_dose_gy({"primary": 1.0, "star_heavy": 0.5}).round(6).item()
        2.5
        """
        linear, root = effect_sums(dose_gy, self.constants(let_kev_um))
        return weighted_dose_gy(linear, root, tissue=self.tissue, fractions=fractions)


def effect_sums(
    dose_gy: Mapping[str, ArrayLike], constants: Constants
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Sum ``alpha_c D_c`` and ``sqrt(beta_c) D_c`` over the components.

    Parameters
    ----------
    dose_gy : mapping of str to array_like
        Dose of each component in Gy.
    constants : dict
        alpha and sqrt(beta) of each component, from `EffectModel.constants`.

    Returns
    -------
    linear, root : ndarray
        ``A`` and ``B``, without unit.
    """
    if not dose_gy:
        raise InputError("no component of the dose", allowed="at least one", remedy="hand over the component doses")
    unknown = [name for name in dose_gy if name not in constants]
    if unknown:
        raise UnknownNameError("component", unknown[0], constants)
    doses = {name: np.asarray(values, dtype=np.float64) for name, values in dose_gy.items()}
    shape = np.broadcast_shapes(*(dose.shape for dose in doses.values()))
    linear, root = np.zeros(shape), np.zeros(shape)
    for name in (component for component in constants if component in doses):
        alpha, slope = constants[name]
        linear += alpha * doses[name]
        root += slope * doses[name]
    return linear, root


def weighted_dose_gy(
    linear: ArrayLike, root: ArrayLike, *, tissue: Tissue | TissueMap, fractions: int = 1
) -> NDArray[np.float64]:
    """Turn the sums ``A`` and ``B`` into the photon dose of equal effect.

    Parameters
    ----------
    linear, root : array_like
        ``A`` and ``B`` over all fractions.
    tissue : Tissue or TissueMap
        Photon constants.
    fractions : int
        Number of equal fractions.

    Returns
    -------
    ndarray
        Effect-weighted dose over all fractions, in Gy.
    """
    if fractions < 1:
        raise InputError(f"{fractions} fractions", allowed="1 or more", remedy="check the fraction number")
    effect = np.asarray(linear, dtype=np.float64) / fractions + (np.asarray(root, dtype=np.float64) / fractions) ** 2
    under = tissue.alpha_per_gy**2 + 4.0 * tissue.beta_per_gy2 * np.maximum(effect, 0.0)
    return np.asarray(fractions * 2.0 * effect / (tissue.alpha_per_gy + np.sqrt(under)))


def weighted_dose_slopes(
    linear: ArrayLike, root: ArrayLike, *, tissue: Tissue | TissueMap, fractions: int = 1
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Give the slopes of the effect-weighted dose with respect to ``A`` and ``B``.

    Parameters
    ----------
    linear, root : array_like
        ``A`` and ``B`` over all fractions.
    tissue : Tissue or TissueMap
        Photon constants.
    fractions : int
        Number of equal fractions.

    Returns
    -------
    by_linear, by_root : ndarray
        dX/dA and dX/dB in Gy.
    """
    dose = weighted_dose_gy(linear, root, tissue=tissue, fractions=fractions) / fractions
    slope = 1.0 / (tissue.alpha_per_gy + 2.0 * tissue.beta_per_gy2 * dose)
    return np.asarray(slope), np.asarray(2.0 * slope * np.asarray(root, dtype=np.float64) / fractions)
