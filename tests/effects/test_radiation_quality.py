"""LET in voxels from two folds."""

from __future__ import annotations

import numpy as np
import pytest

from dosekit.beams.beam import Beam
from dosekit.depths.library import depth_library
from dosekit.depths.quality import star_let_kev_um
from dosekit.effects.radiation_quality import let_from_folds, let_weighted, total_let
from dosekit.errors import InputError


def test_depth_sums_of_two_libraries_give_the_library_let():
    """A fold in one dimension: a weighted sum of the rows of the library."""
    library = depth_library(Beam("pi-", momentum_mev_c=150, momentum_sigma=0.02), [100.0, 120.0])
    weighted = let_weighted(library)
    shares = np.array([0.3, 0.7])
    dose = {"primary": shares @ (library.quantities["core"] + library.quantities["scattered"])}
    times = {"primary": shares @ (weighted.quantities["core"] + weighted.quantities["scattered"])}
    let = let_from_folds(dose, times)["primary"]
    product = sum(shares @ (library.quantities[part] * library.let[part]) for part in ("core", "scattered"))
    known = dose["primary"] > 1e-3 * dose["primary"].max()
    np.testing.assert_allclose(let[known], (product / np.where(known, dose["primary"], 1.0))[known], rtol=1e-12)
    # LET rises towards the end of the range
    assert let[np.argmax(dose["primary"])] > 2.0 * let[0]
    for name in ("core_stops", "scattered_stops", "reactions"):
        assert np.array_equal(weighted.quantities[name], library.quantities[name])


@pytest.mark.parametrize("yields", ["evaluated", "cascade"])
def test_stars_have_the_let_of_their_spectra(yields):
    let = let_from_folds({"star_heavy": [1.0, 0.0]}, {}, yields=yields)
    assert let["star_heavy"].tolist() == [star_let_kev_um("water", yields=yields)["star_heavy"], 0.0]


def test_total_is_the_dose_average(rng):
    dose = {name: rng.uniform(0.0, 1.0, 5) for name in ("primary", "decay")}
    let = {name: rng.uniform(0.0, 9.0, 5) for name in dose}
    expected = (dose["primary"] * let["primary"] + dose["decay"] * let["decay"]) / (dose["primary"] + dose["decay"])
    np.testing.assert_allclose(total_let(dose, let), expected, rtol=1e-13)
    assert total_let({"primary": [0.0]}, {"primary": [5.0]}).tolist() == [0.0]


def test_folds_that_do_not_fit_are_refused():
    for weighted in ({}, {"primary": [1.0, 2.0, 3.0]}):
        with pytest.raises(InputError, match="primary"):
            let_from_folds({"primary": [1.0, 2.0]}, weighted)
