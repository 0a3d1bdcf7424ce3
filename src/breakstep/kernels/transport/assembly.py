"""The linear system of one backward-Euler step of multi-group flux-limited diffusion.

This module knows the discrete equations; it refuses to know opacities, equations of state and how the
system is solved.

The unknowns are the G radiation energy densities E_g of each zone after the step. With the light path
L = c dt, and from here on all opacities times L (so k_g = c dt kappa_g is a pure number)::

    E_g' - E_g = sum over faces a_gf (E_g'(neighbour) - E_g')           diffusion
               - k_g (E_g' - b_g theta')                                 absorption and emission
               + sum_h (r_gh E_h' - r_hg E_g')                           inelastic scattering
               + q_g                                                     deposit
    e' - e     = sum_g k_g (E_g' - b_g theta')                           matter
    theta'     = theta + beta (e' - e)                                   theta = a T^4

**Matter** enters through theta alone, linear in the material energy density e with the slope
beta = 4 a T^3 / (rho c_v), which is exact where c_v ~ T^3. Eliminating theta' zone by zone gives, with
K = sum_h k_h b_h and f = 1 / (1 + beta K),

    theta' = f (theta + beta sum_h k_h E_h'),

hence a rank-one re-emission f beta (k_g b_g) k_h in each zone's dense block, and k_g b_g f theta on the
right. As theta' is not negative, a solved step cools matter of constant c_v by a quarter of e at the most.

**Faces.** a_f = L D / dx^2 with D = lambda / chi and the limiter of Levermore & Pomraning (1981, ApJ 248,
321) in its rational form lambda = (2 + R) / (6 + 3 R + R^2), R = abs(dE/dx) / (chi E), evaluated from the old
E: chi and E are the means of the two zones and the gradient is the difference across the face (its component
along the face is left out, for that would read edge zones of the halo). All of it is symmetric in the two
zones, operation by operation, so both compute the same bits. abs(dE)/E is bounded by 2, its bound for
non-negative E, which also settles E = 0.

**Scattering.** r_gh = L sigma M_gh w_gh with a constant matrix M of non-negative shares (to g, from h) and,
when ``balanced``, w_gh = 2 b_g / (b_g + b_h). A symmetric M then satisfies detailed balance: E_g = b_g theta
is a steady state of every term. What leaves group h arrives in some g, so radiation energy is conserved. This
stands for Compton scattering as a prototype; the exchange of energy with the electrons is left out.

**Dominance.** Off-diagonal entries are not positive. Column h sums to

    1 + sum_f a_hf + k_h - f beta k_h K = 1 + sum_f a_hf + f k_h >= 1 + sum_f a_hf,

since scattering cancels: each block is a strictly column-dominant M-matrix (no pivoting needed, inverse not
negative), and so is the whole system with neighbours included, with column sums of at least 1. Hence
the sum of absolute errors of an iterate is at most the sum of its absolute residuals.
"""

from __future__ import annotations

from breakstep.kernels.compiled import compiled, inlined  # isort: skip  (must precede numba)

import numpy as np

from breakstep.kernels.transport.blocks import LANES, Lanes, factor_panel, load, minus, plus, store, times
from breakstep.kernels.transport.layout import (
    Extent,
    Floats,
    Integers,
    checkerboard,
    halo_strides,
    panel_rows,
    store_last_panel,
    whole_panels,
)

Spacing = tuple[float, float, float]

TINY = 1e-200
"""Keeps 0/0 from arising where the radiation energy or both emission fractions vanish."""


@compiled
def face_row(
    energy: Floats, total: Floats, left: int, step: int, path: float, dx: float, limited: float, faces: Floats
) -> None:
    """Couplings a of a row of faces; face k lies between the places left + k and left + k + step.

    With r = abs(dE) / (E dx), lambda / chi = (2 chi + r) / (6 chi^2 + 3 chi r + r^2): one division less, and
    the free-streaming limit without a division by chi. ``limited`` is 1, or 0 for lambda = 1/3.
    """
    n = faces.size
    e_left = energy[left : left + n]
    e_right = energy[left + step : left + step + n]
    x_left = total[left : left + n]
    x_right = total[left + step : left + step + n]
    scale = path / (dx * dx)
    for k in range(n):
        jump = abs(e_right[k] - e_left[k])
        mean = 0.5 * (e_right[k] + e_left[k])
        bound = 0.5 * jump
        bound = bound if bound > TINY else TINY
        mean = mean if mean > bound else bound
        r = limited * jump / (mean * dx)
        chi = 0.5 * (x_right[k] + x_left[k])
        faces[k] = scale * (2.0 * chi + r) / (chi * (6.0 * chi + 3.0 * r) + r * r)


@compiled
def face_couplings(
    radiation: Floats,
    total: Floats,
    path: float,
    spacing: Spacing,
    limited: float,
    extent: Extent,
    n_axes: int,
) -> Floats:
    """Couplings of each zone to its neighbours, shape (2 * n_axes * G, n_zones): axis, side, group.

    Each face is computed once and stored with both its zones.
    """
    n = radiation.shape[0]
    bands = np.empty((2 * n_axes * n, extent[0] * extent[1] * extent[2]))
    strides = halo_strides(extent, n_axes)
    for axis in range(3 - n_axes, 3):
        for g in range(n):
            low = bands[2 * (axis - 3 + n_axes) * n + g]
            high = bands[(2 * (axis - 3 + n_axes) + 1) * n + g]
            _axis_couplings(radiation[g], total[g], axis, strides, path, spacing[axis], limited, extent, low, high)
    return bands


@compiled
def _axis_couplings(
    energy: Floats,
    total: Floats,
    axis: int,
    strides: tuple[int, int, int, int],
    path: float,
    dx: float,
    limited: float,
    extent: Extent,
    low: Floats,
    high: Floats,
) -> None:
    """Couplings of one group along one axis to the lower and the higher neighbour of each zone."""
    n0, n1, n2 = extent
    step = strides[axis]
    back = (n1 * n2, n2, 1)[axis]
    faces = np.empty(n2 + 1 if axis == 2 else n2)
    for i in range(n0 + 1 if axis == 0 else n0):
        for j in range(n1 + 1 if axis == 1 else n1):
            left = strides[3] + i * strides[0] + j * strides[1] - step
            face_row(energy, total, left, step, path, dx, limited, faces)
            start = (i * n1 + j) * n2
            along = (i, j, 0)[axis]
            if along < extent[axis]:
                low[start : start + n2] = faces[:n2]
            if axis == 2:
                high[start : start + n2] = faces[1:]
            elif along > 0:
                high[start - back : start - back + n2] = faces


@inlined
def _gathered(target: Floats, source: Floats, zones: Integers, factor: float) -> None:
    """Copy eight zones of each component, times a factor."""
    for g in range(target.shape[0]):
        for z in range(LANES):
            target[g, z] = factor * source[g, zones[z]]


@inlined
def _matter(k: Floats, b: Floats, theta: Floats, beta: Floats, zones: Integers, emitted: Floats, back: Floats) -> None:
    """f theta and f beta of eight zones: emission at fixed E, and what absorption adds to it."""
    for z in range(LANES):
        emitted[z] = 0.0
    for g in range(k.shape[0]):
        for z in range(LANES):
            emitted[z] += k[g, z] * b[g, z]
    for z in range(LANES):
        slope = beta[0, zones[z]]
        f = 1.0 / (1.0 + slope * emitted[z])
        back[z] = f * slope
        emitted[z] = f * theta[0, zones[z]]


@inlined
def _reemission(panel: Floats, k: Floats, b: Floats, back: Floats, source: Floats) -> None:
    """Fill the blocks with 1 + k on the diagonal less the rank-one re-emission; ``source`` is scratch."""
    n = k.shape[0]
    for g in range(n):
        for z in range(LANES):
            source[g, z] = -(k[g, z] * b[g, z]) * back[z]
    for h in range(n):
        absorbed = load(k, h)
        for g in range(n):
            store(panel, h * n + g, times(load(source, g), absorbed))
        for z in range(LANES):
            panel[h * n + h, z] += 1.0 + k[h, z]


@inlined
def _share(up: Lanes, down: Lanes) -> Lanes:
    """2 / (up + down), lanewise."""
    return (
        2.0 / (up[0] + down[0]),
        2.0 / (up[1] + down[1]),
        2.0 / (up[2] + down[2]),
        2.0 / (up[3] + down[3]),
        2.0 / (up[4] + down[4]),
        2.0 / (up[5] + down[5]),
        2.0 / (up[6] + down[6]),
        2.0 / (up[7] + down[7]),
    )


@inlined
def _move(panel: Floats, source_row: int, target_row: int, rate: Lanes, fraction: float) -> None:
    """Take ``rate * fraction`` from an off-diagonal row and give it to a diagonal one."""
    factor = (fraction, fraction, fraction, fraction, fraction, fraction, fraction, fraction)
    store(panel, source_row, minus(load(panel, source_row), rate, factor))
    store(panel, target_row, plus(load(panel, target_row), rate, factor))


@inlined
def _scatter(panel: Floats, weights: Floats, rates: Floats, m: Floats) -> None:
    """Add inelastic scattering; of each pair of groups both directions at once.

    ``weights`` are the emission fractions, or ones, for which w_gh = 1; ``rates``, shape (1, 8), are
    opacities times the light path.
    """
    n = m.shape[0]
    rate = load(rates, 0)
    for h in range(n):
        down = load(weights, h)
        for g in range(h):
            up = load(weights, g)
            shared = times(rate, _share(up, down))
            _move(panel, h * n + g, h * n + h, times(shared, up), m[g, h])
            _move(panel, g * n + h, g * n + g, times(shared, down), m[h, g])


@inlined
def _couple(panel: Floats, bands: Floats, zones: Integers, n: int) -> None:
    """Store the couplings behind the right-hand side and add them to the diagonal."""
    for row in range(bands.shape[0]):
        g = row % n
        for z in range(LANES):
            coupling = bands[row, zones[z]]
            panel[n * n + n + row, z] = coupling
            panel[g * n + g, z] += coupling


@compiled
def assemble_flat(
    radiation: Floats,
    total: Floats,
    absorption: Floats,
    emission: Floats,
    theta: Floats,
    beta: Floats,
    deposit: Floats,
    scattering: Floats,
    redistribution: Floats,
    balanced: bool,
    path: float,
    spacing: Spacing,
    limited: float,
    extent: Extent,
    n_axes: int,
) -> tuple[Floats, Floats, int]:
    """Face couplings, the factored system in panel order, and a zone without a usable block or -1.

    ``radiation`` and ``total`` have a halo, shape (G, n_with_halo); the rest has none, shape (., n_zones).
    """
    n, n_zones = absorption.shape
    bands = face_couplings(radiation, total, path, spacing, limited, extent, n_axes)
    zones, places, _ = checkerboard(extent, n_axes)
    rows = panel_rows(n, n_axes)
    system = np.empty(rows * n_zones)
    panels = whole_panels(system, rows)
    last_panel = np.empty((rows, LANES))
    k = np.empty((n, LANES))
    b = np.empty((n, LANES))
    right = np.empty((n, LANES))
    weights = np.ones((n, LANES))
    rates = np.empty((1, LANES))
    emitted = np.empty(LANES)
    back = np.empty(LANES)
    inelastic = np.any(redistribution != 0.0)
    bad_zone = n_zones
    for q in range(zones.shape[0]):
        panel = panels[q] if q < panels.shape[0] else last_panel
        _gathered(k, absorption, zones[q], path)
        _gathered(b, emission, zones[q], 1.0)
        _matter(k, b, theta, beta, zones[q], emitted, back)
        _reemission(panel, k, b, back, right)
        if inelastic:
            if balanced:
                weights[:] = b + TINY
            _gathered(rates, scattering, zones[q], path)
            _scatter(panel, weights, rates, redistribution)
        _couple(panel, bands, zones[q], n)
        for g in range(n):
            for z in range(LANES):
                given = radiation[g, places[q, z]] + deposit[g, zones[q, z]]
                panel[n * n + g, z] = given + k[g, z] * b[g, z] * emitted[z]
        bad = factor_panel(panel, n)
        if bad >= 0:
            bad_zone = min(bad_zone, zones[q, bad])
    if panels.shape[0] < zones.shape[0]:
        store_last_panel(system, last_panel)
    return bands, system, bad_zone if bad_zone < n_zones else -1
