"""Slow, readable oracles: the same sums as the fast code, written as they are said aloud."""

from __future__ import annotations


# ---------------------------------------------------------------- effects: volume histograms and agreement


def dose_at_volume(doses, volumes, percent):
    """Largest dose that at least `percent` of the volume receives, by trying every dose there is."""
    total = sum(volumes)
    best = None
    for candidate in doses:
        reached = sum(volume for dose, volume in zip(doses, volumes, strict=True) if dose >= candidate)
        if reached >= total * percent / 100.0 - 1e-12 * total and (best is None or candidate > best):
            best = candidate
    return best


def volume_share(doses, volumes, level):
    """Share of the volume with at least this dose."""
    reached = sum(volume for dose, volume in zip(doses, volumes, strict=True) if dose >= level)
    return reached / sum(volumes)


def interpolate_linear(values, position):
    """Linear interpolation on every axis at a position in index units; None outside the grid."""
    from itertools import product
    from math import floor

    lows, parts = [], []
    for place, length in zip(position, values.shape, strict=True):
        if place < -1e-9 or place > length - 1 + 1e-9:
            return None
        low = min(max(floor(place), 0), max(length - 2, 0))
        lows.append(low)
        parts.append(place - low)
    total = 0.0
    for corner in product((0, 1), repeat=len(lows)):
        weight, index = 1.0, []
        for low, part, step, length in zip(lows, parts, corner, values.shape, strict=True):
            weight *= part if step else 1.0 - part
            index.append(min(low + step, length - 1))
        total += weight * values[tuple(index)]
    return total


def gamma(reference, evaluated, spacing, other_spacing, *, distance, percent, local, threshold, step, largest):
    """Gamma index after Low 1998 by trying every lattice point around every reference point."""
    from itertools import product

    import numpy as np

    result = np.full(reference.shape, np.nan)
    top = reference.max()
    reach = int(np.floor(largest * distance / step + 1e-9))
    for index in np.ndindex(*reference.shape):
        dose = reference[index]
        if dose < threshold / 100.0 * top or dose <= 0.0:
            continue
        tolerance = percent / 100.0 * (dose if local else top)
        best = None
        for shifts in product(range(-reach, reach + 1), repeat=reference.ndim):
            away = sum((shift * step) ** 2 for shift in shifts)
            place = [
                (number * width + shift * step) / other
                for number, width, shift, other in zip(index, spacing, shifts, other_spacing, strict=True)
            ]
            value = interpolate_linear(evaluated, place)
            if value is None:
                continue
            square = away / distance**2 + ((value - dose) / tolerance) ** 2
            best = square if best is None else min(best, square)
        if best is not None:
            result[index] = min(np.sqrt(best), largest)
    return result


# ---------------------------------------------------------------- effects: equal effect


def photon_dose_of_equal_effect(doses, alphas, betas, *, alpha, beta, fractions):
    """Photon dose with the effect of a mixed field, found by halving an interval."""
    linear = sum(a * d / fractions for a, d in zip(alphas, doses, strict=True))
    root = sum(b**0.5 * d / fractions for b, d in zip(betas, doses, strict=True))
    effect = linear + root**2
    low, high = 0.0, 1.0
    while alpha * high + beta * high**2 < effect:
        high *= 2.0
    for _ in range(200):
        middle = 0.5 * (low + high)
        if alpha * middle + beta * middle**2 < effect:
            low = middle
        else:
            high = middle
    return fractions * 0.5 * (low + high)
