"""Fixed sets of directions over the sphere, for everything that is carried along cones.

Quadratures with the symmetry of the cube, after V. I. Lebedev, Zh. Vychisl. Mat. Mat. Fiz. 16 (1976) 293. A set is
kept as the orbits of the cube's 48 turns and mirrors: one direction of each, and the weight of the whole orbit.
"""

from __future__ import annotations

from functools import lru_cache
from itertools import permutations, product

import numpy as np
from numpy.typing import NDArray

from dosekit.errors import InputError

__all__ = ["DIRECTION_SETS", "direction_set"]

_O3, _O2 = 0.5773502691896258, 0.7071067811865476

DIRECTION_SETS: dict[int, tuple[tuple[tuple[float, float, float], float], ...]] = {
    26: (((1.0, 0.0, 0.0), 0.28571428571429), ((_O2, _O2, 0.0), 0.45714285714286), ((_O3, _O3, _O3), 0.25714285714286)),
    50: (
        ((1.0, 0.0, 0.0), 0.07619047619048),
        ((_O2, _O2, 0.0), 0.27089947089947),
        ((_O3, _O3, _O3), 0.16875),
        ((0.904534033733, 0.301511344578, 0.301511344578), 0.48416005291005),
    ),
    86: (
        ((1.0, 0.0, 0.0), 0.06926406926407),
        ((_O3, _O3, _O3), 0.09555127268685),
        ((0.694354006603, 0.694354006603, 0.189063552885), 0.28503603106889),
        ((0.852518311701, 0.369602846454, 0.369602846454), 0.26665333705448),
        ((0.927330657151, 0.37424303909, 0.0), 0.28349528992571),
    ),
    110: (
        ((1.0, 0.0, 0.0), 0.02296962296962),
        ((_O3, _O3, _O3), 0.0783499000999),
        ((0.690421048382, 0.690421048382, 0.215957291846), 0.23862755738827),
        ((0.828769981253, 0.395689473056, 0.395689473056), 0.2302913120657),
        ((0.878158910604, 0.478369028812, 0.0), 0.23267991267991),
        ((0.965124035087, 0.185115635345, 0.185115635345), 0.19708169479659),
    ),
    194: (
        ((1.0, 0.0, 0.0), 0.01069404268347),
        ((_O2, _O2, 0.0), 0.06860287139973),
        ((_O3, _O3, _O3), 0.04458706543079),
        ((0.67129734427, 0.67129734427, 0.314196994183), 0.13460889798211),
        ((0.777493219315, 0.444693317872, 0.444693317872), 0.13245051521457),
        ((0.836036015482, 0.525118572444, 0.159041710538), 0.26545194797919),
        ((0.912509096867, 0.289246562758, 0.289246562758), 0.12379770508333),
        ((0.938319218138, 0.345770219761, 0.0), 0.12124430555076),
        ((0.982972302707, 0.129933544765, 0.129933544765), 0.09856264867607),
    ),
}
"""Orbits of the cube's symmetry: one direction of each, and the weight of the whole orbit."""


@lru_cache(maxsize=8)
def direction_set(count: int) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return unit directions and weights.

    Parameters
    ----------
    count : {26, 50, 86, 110, 194}
        Number of directions.

    Returns
    -------
    tuple of ndarray
        Directions (x, y, z), shape (n, 3), and weights that sum to 1.

    Raises
    ------
    InputError
        If there is no such set.

    Examples
    --------
    >>> directions, weights = direction_set(50)
    >>> directions.shape, round(float(weights.sum()), 12)
    ((50, 3), 1.0)
    """
    if count not in DIRECTION_SETS:
        raise InputError(f"{count!r} directions", allowed=", ".join(map(str, DIRECTION_SETS)))
    directions: list[tuple[float, float, float]] = []
    weights: list[float] = []
    for first, weight in DIRECTION_SETS[count]:
        orbit = sorted(
            {
                tuple(sign * value for sign, value in zip(signs, order, strict=True))
                for order in permutations(first)
                for signs in product((1.0, -1.0), repeat=3)
            }
        )
        orbit = [tuple(value + 0.0 for value in direction) for direction in orbit]
        orbit = sorted(set(orbit))
        directions += orbit  # type: ignore[arg-type]
        weights += [weight / len(orbit)] * len(orbit)
    found, total = np.array(directions), np.array(weights)
    found /= np.linalg.norm(found, axis=1, keepdims=True)
    total /= total.sum()
    found.setflags(write=False)
    total.setflags(write=False)
    return found, total
