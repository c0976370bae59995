"""Compiled histories of neutrons and photons in a uniform medium, started at a point.

Every function here is plain arithmetic on arrays that are passed in; nothing is read from other modules. Random numbers
come from a counter of its own (splitmix64, Steele, Lea and Flood, OOPSLA 2014), so that a seed gives the same numbers
on every machine and with any number of threads.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit

from dosekit.basis.compiling import KERNEL, PART

__all__ = ["neutron_histories", "photon_histories"]

NEUTRON_MASS_MEV = 939.565


@njit(**PART)
def _uniform(state):  # type: ignore[no-untyped-def]
    """Advance the counter and return a number in (0, 1)."""
    state[0] += np.uint64(0x9E3779B97F4A7C15)
    z = state[0]
    z = (z ^ (z >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
    z = (z ^ (z >> np.uint64(27))) * np.uint64(0x94D049BB133111EB)
    z = z ^ (z >> np.uint64(31))
    return (float(z >> np.uint64(11)) + 0.5) / 9007199254740992.0


@njit(**PART)
def _turn(direction, mu, phi):  # type: ignore[no-untyped-def]
    """Turn a direction by the cosine mu and the azimuth phi, in place."""
    u, v, w = direction[0], direction[1], direction[2]
    sine = math.sqrt(max(0.0, 1.0 - mu * mu))
    c, s = math.cos(phi), math.sin(phi)
    side = math.sqrt(max(0.0, 1.0 - w * w))
    if side > 1e-8:
        direction[0] = u * mu + sine * (u * w * c - v * s) / side
        direction[1] = v * mu + sine * (v * w * c + u * s) / side
        direction[2] = w * mu - sine * side * c
    else:
        direction[0] = sine * c
        direction[1] = sine * s
        direction[2] = mu if w > 0.0 else -mu
    norm = math.sqrt(direction[0] ** 2 + direction[1] ** 2 + direction[2] ** 2)
    direction[0] /= norm
    direction[1] /= norm
    direction[2] /= norm


@njit(**PART)
def _score(shells, edges, radius, energy):  # type: ignore[no-untyped-def]
    """Add energy to the shell that holds a radius; the last element takes what lies beyond."""
    last = len(edges) - 1
    if radius >= edges[last]:
        shells[last] += energy
        return
    low, high = 0, last
    while high - low > 1:
        middle = (low + high) // 2
        if edges[middle] <= radius:
            low = middle
        else:
            high = middle
    shells[low] += energy


@njit(**PART)
def _lookup(grid_log0, grid_step, values, energy):  # type: ignore[no-untyped-def]
    """Interpolate a table on a logarithmic energy grid."""
    place = (math.log(max(energy, 1e-12)) - grid_log0) / grid_step
    if place <= 0.0:
        return values[0]
    index = int(place)
    if index >= len(values) - 1:
        return values[-1]
    part = place - index
    return values[index] * (1.0 - part) + values[index + 1] * part


@njit(**PART)
def _slow_down(shells, edges, place, direction, energy, grid_log0, grid_step, ranges, log_ratio):  # type: ignore[no-untyped-def]
    """Lay the energy of a charged particle along its straight track (ranges in mm on the energy grid)."""
    total = _lookup(grid_log0, grid_step, ranges, energy) * log_ratio
    if total < 0.25:
        radius = math.sqrt(place[0] ** 2 + place[1] ** 2 + place[2] ** 2)
        _score(shells, edges, radius, energy)
        return
    steps = int(min(24.0, 4.0 + 2.0 * total))
    # equal steps of energy, each laid at the middle of its piece of track
    for i in range(steps):
        left = energy * (1.0 - (i + 0.5) / steps)
        along = total - _lookup(grid_log0, grid_step, ranges, left) * log_ratio
        x = place[0] + direction[0] * along
        y = place[1] + direction[1] * along
        z = place[2] + direction[2] * along
        _score(shells, edges, math.sqrt(x * x + y * y + z * z), energy / steps)


@njit(**PART)
def _gamma2(state, temperature):  # type: ignore[no-untyped-def]
    """Return an energy from E exp(-E / t)."""
    return -temperature * math.log(_uniform(state) * _uniform(state))


@njit(**PART)
def _collide(state, energy, mass_number, q_values, level_mev, pushed, out):  # type: ignore[no-untyped-def]
    """Emit the products of a non-elastic collision.

    Fills ``out`` with rows (kind, kinetic energy, forward push) and returns their number and the photon energy.
    Kinds: 0 neutron, 1 proton, 2 deuteron, 3 alpha, 4 local recoil. ``q_values`` are separation energies of n, p,
    d, alpha.
    """
    count = 0
    photon = 0.0
    recoil = min(energy, 10.0 + 0.3 * energy) / (mass_number + 1.0)
    left = energy - recoil
    out[count, 0] = 4.0
    out[count, 1] = recoil
    out[count, 2] = 0.0
    count += 1
    fast = energy > level_mev + 8.0
    if fast and _uniform(state) > math.exp(-(energy - level_mev - 8.0) / pushed[0]):
        # direct part: the neutron leads, or a proton or deuteron is knocked out in its place
        dice = _uniform(state)
        kind = 0 if dice < pushed[1] else (1 if dice < pushed[1] + pushed[2] else 2)
        cost = 0.0 if kind == 0 else q_values[kind]
        if left > cost + 1.0:
            lead = (left - cost) * _uniform(state) ** pushed[3]
            out[count, 0] = kind
            out[count, 1] = lead
            out[count, 2] = 2.0 * lead / energy + 0.6
            count += 1
            left -= cost + lead
            # its partner, when enough is left
            if kind == 0 and left > q_values[1] + 6.0 and _uniform(state) < pushed[4]:
                partner = 1 if _uniform(state) < 0.65 else 0
                cost = q_values[partner]
                if left > cost + 1.0:
                    second = (left - cost) * _uniform(state)
                    out[count, 0] = partner
                    out[count, 1] = second
                    out[count, 2] = 1.0
                    count += 1
                    left -= cost + second
    elif energy < level_mev + 8.0 or _uniform(state) < 0.35:
        # inelastic scattering to low levels, the neutron keeps what the level leaves
        if _uniform(state) < pushed[5] and energy + pushed[6] > 0.3:
            out[count, 0] = 3.0
            out[count, 1] = max(0.0, left + pushed[6])
            out[count, 2] = 0.0
            return count + 1, 0.0
        spent = min(level_mev, 0.9 * left)
        out[count, 0] = 0.0
        out[count, 1] = left - spent
        out[count, 2] = 0.4
        return count + 1, spent
    # evaporation of what is left
    mass = mass_number
    for _ in range(8):
        if count >= out.shape[0] - 1:
            break
        temperature = math.sqrt(max(left, 1.0) / (mass / 8.0 + 0.5))
        weights_sum = 0.0
        weight_n = math.exp(-q_values[0] / max(temperature, 0.5) / 2.0) if left > q_values[0] + 0.3 else 0.0
        weight_p = 0.9 * math.exp(-q_values[1] / max(temperature, 0.5) / 2.0) if left > q_values[1] + 1.0 else 0.0
        weight_d = 0.6 * math.exp(-q_values[2] / max(temperature, 0.5) / 2.0) if left > q_values[2] + 1.5 else 0.0
        weight_a = (
            1.0 * math.exp(-(q_values[3] + 2.0) / max(temperature, 0.5) / 2.0) if left > q_values[3] + 1.0 else 0.0
        )
        weights_sum = weight_n + weight_p + weight_d + weight_a
        if weights_sum <= 0.0:
            break
        dice = _uniform(state) * weights_sum
        kind = 3
        if dice < weight_n:
            kind = 0
        elif dice < weight_n + weight_p:
            kind = 1
        elif dice < weight_n + weight_p + weight_d:
            kind = 2
        barrier = 0.0 if kind == 0 else (1.0 if kind < 3 else 1.5)
        spare = left - q_values[kind]
        kinetic = min(spare, barrier * 0.5 + _gamma2(state, 0.5 * temperature))
        out[count, 0] = kind
        out[count, 1] = kinetic
        out[count, 2] = 0.2
        count += 1
        left = spare - kinetic
        mass = max(4.0, mass - (1.0, 1.0, 2.0, 4.0)[kind])
    photon = min(left, 8.0)
    return count, photon


@njit(**KERNEL)
def neutron_histories(  # type: ignore[no-untyped-def]
    source_energy,
    histories,
    seed,
    edges,
    grid_log0,
    grid_step,
    mass_numbers,
    elastic_per_mm,
    other_per_mm,
    q_values,
    levels,
    alpha_q,
    alpha_part,
    radii_fm,
    pushed,
    proton_ranges,
    deuteron_ranges,
    photon_per_mm,
    cutoff,
):
    """Follow neutrons from a point and return energy per neutron in shells.

    Returns shells with one element more than there are intervals (energy beyond), and the sums (binding lost,
    histories' total). Cross-sections are macroscopic, per mm, on the logarithmic energy grid, one row per element.
    """
    shells = np.zeros(len(edges))
    sums = np.zeros(4)
    state = np.empty(1, dtype=np.uint64)
    state[0] = np.uint64(seed)
    stack_e = np.empty(64)
    stack_r = np.empty((64, 3))
    stack_d = np.empty((64, 3))
    out = np.empty((16, 3))
    place = np.zeros(3)
    direction = np.zeros(3)
    aside = np.zeros(3)
    tuning = pushed.copy()
    elements = len(mass_numbers)
    for _ in range(histories):
        stack_e[0] = source_energy
        stack_r[0] = 0.0
        stack_d[0, 0] = 0.0
        stack_d[0, 1] = 0.0
        stack_d[0, 2] = 1.0
        waiting = 1
        while waiting > 0:
            waiting -= 1
            energy = stack_e[waiting]
            for k in range(3):
                place[k] = stack_r[waiting, k]
                direction[k] = stack_d[waiting, k]
            while energy > cutoff:
                total = 0.0
                for k in range(elements):
                    total += _lookup(grid_log0, grid_step, elastic_per_mm[k], energy)
                    total += _lookup(grid_log0, grid_step, other_per_mm[k], energy)
                free = -math.log(_uniform(state)) / total
                for k in range(3):
                    place[k] += direction[k] * free
                radius = math.sqrt(place[0] ** 2 + place[1] ** 2 + place[2] ** 2)
                if radius > 2.0 * edges[-1]:
                    break
                dice = _uniform(state) * total
                hit = 0
                elastic = True
                for k in range(elements):
                    part = _lookup(grid_log0, grid_step, elastic_per_mm[k], energy)
                    if dice < part:
                        hit = k
                        elastic = True
                        break
                    dice -= part
                    part = _lookup(grid_log0, grid_step, other_per_mm[k], energy)
                    hit = k
                    elastic = False
                    if dice < part:
                        break
                    dice -= part
                mass = mass_numbers[hit]
                phi = 2.0 * math.pi * _uniform(state)
                if elastic and mass < 1.5:
                    # n-p: 1 + b cos^2 in the centre of mass, b = 2 (E / 90 MeV)^2 (Gammel)
                    b = 2.0 * (energy / 90.0) ** 2
                    while True:
                        mu = 2.0 * _uniform(state) - 1.0
                        if _uniform(state) * (1.0 + b) <= 1.0 + b * mu * mu:
                            break
                    given = energy * 0.5 * (1.0 - mu)
                    lab = math.sqrt(max(0.0, 0.5 * (1.0 + mu)))
                    recoil_mu = math.sqrt(max(0.0, 0.5 * (1.0 - mu)))
                    for k in range(3):
                        aside[k] = direction[k]
                    _turn(aside, recoil_mu, phi + math.pi)
                    _slow_down(shells, edges, place, aside, given, grid_log0, grid_step, proton_ranges, 1.0)
                    energy -= given
                    _turn(direction, lab, phi)
                elif elastic:
                    # diffraction peak exp(-b q^2) up to backward scattering, q in 1/fm
                    wave = math.sqrt(2.0 * NEUTRON_MASS_MEV * energy) / 197.327 * mass / (mass + 1.0)
                    most = 4.0 * wave * wave
                    b = 0.25 * radii_fm[hit] ** 2
                    full = -math.expm1(-b * most)
                    q2 = -math.log(1.0 - _uniform(state) * full) / b
                    mu = 1.0 - 2.0 * q2 / most
                    given = energy * 2.0 * mass / (mass + 1.0) ** 2 * (1.0 - mu)
                    _score(shells, edges, radius, given)
                    energy -= given
                    lab = (1.0 + mass * mu) / math.sqrt(1.0 + mass * mass + 2.0 * mass * mu)
                    _turn(direction, lab, phi)
                else:
                    tuning[5] = alpha_part[hit]
                    tuning[6] = alpha_q[hit]
                    count, photon = _collide(state, energy, mass, q_values[hit], levels[hit], tuning, out)
                    spent = photon
                    for i in range(count):
                        kind = int(out[i, 0])
                        kinetic = out[i, 1]
                        spent += kinetic
                        for k in range(3):
                            aside[k] = direction[k]
                        # forward push c: cosine from exp(c mu)
                        c = out[i, 2]
                        dice = _uniform(state)
                        if c > 1e-3:
                            mu = math.log(math.exp(-c) + dice * (math.exp(c) - math.exp(-c))) / c
                        else:
                            mu = 2.0 * dice - 1.0
                        _turn(aside, mu, 2.0 * math.pi * _uniform(state))
                        if kind == 0:
                            if waiting < 64:
                                stack_e[waiting] = kinetic
                                for k in range(3):
                                    stack_r[waiting, k] = place[k]
                                    stack_d[waiting, k] = aside[k]
                                waiting += 1
                        elif kind == 1:
                            _slow_down(shells, edges, place, aside, kinetic, grid_log0, grid_step, proton_ranges, 1.0)
                        elif kind == 2:
                            _slow_down(shells, edges, place, aside, kinetic, grid_log0, grid_step, deuteron_ranges, 1.0)
                        else:
                            _score(shells, edges, radius, kinetic)
                    sums[0] += energy - spent
                    sums[1] += spent - 0.0
                    if photon > 0.0:
                        mu = 2.0 * _uniform(state) - 1.0
                        _turn(direction, mu, phi)
                        free = -math.log(_uniform(state)) / photon_per_mm
                        x = place[0] + direction[0] * free
                        y = place[1] + direction[1] * free
                        z = place[2] + direction[2] * free
                        _score(shells, edges, math.sqrt(x * x + y * y + z * z), photon)
                    energy = -1.0
            radius = math.sqrt(place[0] ** 2 + place[1] ** 2 + place[2] ** 2)
            if energy > 0.0:
                _score(shells, edges, radius, energy)
    for i in range(len(edges)):
        shells[i] /= histories
    for i in range(4):
        sums[i] /= histories
    return shells, sums


@njit(**PART)
def _lay_electron(shells, edges, place, direction, energy, mev_per_mm):  # type: ignore[no-untyped-def]
    """Lay the energy of an electron along a straight track with constant stopping power."""
    length = energy / mev_per_mm
    steps = int(min(16.0, 1.0 + length))
    for i in range(steps):
        along = length * (i + 0.5) / steps
        x = place[0] + direction[0] * along
        y = place[1] + direction[1] * along
        z = place[2] + direction[2] * along
        _score(shells, edges, math.sqrt(x * x + y * y + z * z), energy / steps)


@njit(**KERNEL)
def photon_histories(  # type: ignore[no-untyped-def]
    source_energy,
    histories,
    seed,
    edges,
    grid_log0,
    grid_step,
    compton_per_mm,
    photo_per_mm,
    pair_per_mm,
    electron_mev_per_mm,
    radiation_mev,
    cutoff,
):
    """Follow photons from a point and return energy per photon in shells (the last element lies beyond)."""
    shells = np.zeros(len(edges))
    state = np.empty(1, dtype=np.uint64)
    state[0] = np.uint64(seed)
    rest = 0.51099895
    stack_e = np.empty(64)
    stack_r = np.empty((64, 3))
    stack_d = np.empty((64, 3))
    place = np.zeros(3)
    direction = np.zeros(3)
    aside = np.zeros(3)
    for _ in range(histories):
        stack_e[0] = source_energy
        stack_r[0] = 0.0
        stack_d[0, 0] = 0.0
        stack_d[0, 1] = 0.0
        stack_d[0, 2] = 1.0
        waiting = 1
        while waiting > 0:
            waiting -= 1
            energy = stack_e[waiting]
            for k in range(3):
                place[k] = stack_r[waiting, k]
                direction[k] = stack_d[waiting, k]
            while energy > cutoff:
                compton = _lookup(grid_log0, grid_step, compton_per_mm, energy)
                photo = _lookup(grid_log0, grid_step, photo_per_mm, energy)
                pair = _lookup(grid_log0, grid_step, pair_per_mm, energy)
                total = compton + photo + pair
                free = -math.log(_uniform(state)) / total
                for k in range(3):
                    place[k] += direction[k] * free
                if place[0] ** 2 + place[1] ** 2 + place[2] ** 2 > 4.0 * edges[-1] ** 2:
                    break
                dice = _uniform(state) * total
                parts = 1
                electron = energy
                left = 0.0
                for k in range(3):
                    aside[k] = direction[k]
                if dice < compton:
                    # Klein-Nishina by rejection on the scattered fraction e = k'/k (Butcher and Messel 1960)
                    k0 = energy / rest
                    low = 1.0 / (1.0 + 2.0 * k0)
                    a1 = -math.log(low)
                    a2 = 0.5 * (1.0 - low * low)
                    while True:
                        if _uniform(state) * (a1 + a2) < a1:
                            e = math.exp(-a1 * _uniform(state))
                        else:
                            e = math.sqrt(low * low + (1.0 - low * low) * _uniform(state))
                        t = (1.0 - e) / (k0 * e)
                        if _uniform(state) <= 1.0 - e * t * (2.0 - t) / (1.0 + e * e):
                            break
                    mu = 1.0 - t
                    left = e * energy
                    electron = energy - left
                    phi = 2.0 * math.pi * _uniform(state)
                    if electron > 0.0:
                        momentum = math.sqrt(electron * (electron + 2.0 * rest))
                        mu_e = min(1.0, max(-1.0, (energy - left * mu) / momentum))
                        _turn(aside, mu_e, phi + math.pi)
                    _turn(direction, mu, phi)
                elif dice >= compton + photo:
                    # pair: the two share the energy evenly on average; annihilation quanta start on the spot
                    electron = energy - 2.0 * rest
                    parts = 2
                    if waiting < 62:
                        mu = 2.0 * _uniform(state) - 1.0
                        phi = 2.0 * math.pi * _uniform(state)
                        side = math.sqrt(1.0 - mu * mu)
                        for sign in (-1.0, 1.0):
                            stack_e[waiting] = rest
                            for k in range(3):
                                stack_r[waiting, k] = place[k]
                            stack_d[waiting, 0] = sign * side * math.cos(phi)
                            stack_d[waiting, 1] = sign * side * math.sin(phi)
                            stack_d[waiting, 2] = sign * mu
                            waiting += 1
                share = _uniform(state) if parts == 2 else 1.0
                for i in range(parts):
                    one = electron * (share if i == 0 else 1.0 - share)
                    radiated = one * one / (one + radiation_mev)
                    if radiated > 0.5 and waiting < 63:
                        stack_e[waiting] = radiated
                        for k in range(3):
                            stack_r[waiting, k] = place[k]
                            stack_d[waiting, k] = aside[k]
                        waiting += 1
                        one -= radiated
                    _lay_electron(shells, edges, place, aside, one, electron_mev_per_mm)
                energy = left
            if energy > 0.0:
                _score(shells, edges, math.sqrt(place[0] ** 2 + place[1] ** 2 + place[2] ** 2), energy)
    for i in range(len(edges)):
        shells[i] /= histories
    return shells
