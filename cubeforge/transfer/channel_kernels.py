"""What a row of crossings, one in each of sixteen rays, does to the radiation in each channel; float32.

Between two folds a ray carries, for each sampled velocity, ``bright``: the intensity gathered, and ``lost = 1 - T``:
the share of the light from behind that is gone. Kept as ``lost``, a thousand thin crossings don't drown in the
rounding of a transmission close to 1, and an opaque channel ends at 1 rather than in denormals. `fold` moves both into
float64.

The state is flat: for each velocity, sixteen of ``bright``, then sixteen of ``lost``. Velocities u are in units of the
line width times sqrt(ln 2), so that the profile is ``2**-(u*u)``, and optical depths in units of ln 2, so that
transmission is ``2**-s``.

Polynomials are Chebyshev fits; relative errors, measured in float32, are beside them. Tried and slower: one ray at a
time with channels in the lanes (ragged windows: 2 to 3 times slower), the compiler's own vectoriser (4 times).
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numba import float32, njit

from cubeforge.transfer.vectors import (
    LANES,
    exp2_minus,
    fma,
    greatest,
    larger,
    load,
    one_minus_exp2,
    spread,
    store,
    where_zero,
)

_opts = {"nogil": True, "cache": True, "error_model": "numpy", "boundscheck": False}
_inline = {"forceinline": True, **_opts}
Array = Any

ROW = 5
"""Vectors of a row for each line: optical depth and energy at the line's centre, velocity, 1/b, squared half span."""
STEP = 2 * LANES
"""Numbers of state for each sampled velocity."""
THIN, MODERATE, ANY = 0, 1, 2
"""How exactly 1 - exp(-tau) must be done: tau below 0.05, below 1, or anything."""
SHARP = 2e-3
"""Squared half span, in widths, below which a line's shape is Gaussian to 1e-6."""
RESTART = 8
"""Channels after which the recurrence for the Gaussian starts afresh, so that its rounding stays below 1e-6."""
FARTHEST = 118.0
"""Largest exponent for which the recurrence is used: beyond, 2**-(u*u) would underflow and stay 0."""
LEAST_TAU = -10.0
"""Bound on the optical depth of one crossing of inverted (amplifying) gas."""
DARK = 1e-30
"""A transmission below this is set to zero."""

_LN2 = float32(0.6931471805599453)
_SQRT_LOG2_E = float32(1.2011224087864498)
_LOG2_E = float32(1.4426950408889634)


@njit(**_inline)
def escape(mode, s):  # type: ignore[no-untyped-def]
    """(1 - 2^-s) / (s ln 2): the mean transmission of a crossing; to 3e-7 in the range of `mode`."""
    if mode == THIN:
        p = fma(s, float32(-0.013877475), float32(0.08008553))
        return fma(fma(p, s, float32(-0.34657359)), s, float32(1.0))
    if mode == MODERATE:
        t = s * _LN2
        p = fma(t, float32(-2.542885522416327e-05), float32(0.00020399517961777747))
        p = fma(p, t, float32(-0.00138841662555933))
        p = fma(p, t, float32(0.008329829201102257))
        p = fma(p, t, float32(-0.041666798293590546))
        p = fma(p, t, float32(0.1666673719882965))
        return fma(fma(p, t, float32(-0.5)), t, float32(1.0))
    t = s * _LN2
    return where_zero(t, float32(1.0), one_minus_exp2(s) / t)


@njit(**_inline)
def pass_light(mode, state, at, s, energy):  # type: ignore[no-untyped-def]
    """One crossing's optical depth `s` (in ln 2) and energy, at the velocity whose state is at `at`."""
    lost = load(state, at + LANES)
    seen = escape(mode, s) * fma(lost, float32(-1.0), float32(1.0))
    store(state, at, fma(seen, energy, load(state, at)))
    store(state, at + LANES, fma(seen, s * _LN2, lost))


@njit(**_inline)
def skew(square, fourth, sixth):  # type: ignore[no-untyped-def]
    """Factor on a widened Gaussian for a velocity that changes evenly along a crossing; `square` is u*u.

    Gram-Charlier: the Hermite polynomials of orders 4 and 6 with the cumulants of an even distribution.
    """
    x2 = square * _LN2
    h4 = fma(fma(x2, float32(4.0), float32(-12.0)), x2, float32(3.0))
    h6 = fma(fma(fma(x2, float32(8.0), float32(-60.0)), x2, float32(90.0)), x2, float32(-15.0))
    return fma(fourth, h4, fma(sixth, h6, float32(1.0)))


@njit(**_inline)
def cross_sharp(mode, state, at, stop, near, step, tau, energy):  # type: ignore[no-untyped-def]
    """Velocities of the state from `at` to `stop` for a Gaussian line.

    `near` is the first velocity less the line's, in channels, and `step` one channel in u. Every u is made from `near`
    afresh: adding step by step would add up roundings.
    """
    channel = float32(0.0)
    u = near * step
    reach = (near + float32((stop - at) // STEP)) * step
    farthest = larger(u * u, reach * reach)
    if greatest(farthest) < float32(FARTHEST) and greatest(step) < float32(4.0):
        double = step * step
        growth = exp2_minus(double + double)
        while at < stop:
            end = min(at + RESTART * STEP, stop)
            u = (near + channel) * step
            p = exp2_minus(u * u)
            ratio = exp2_minus(fma(u + u, step, double))
            channel += float32(RESTART)
            while at < end:
                pass_light(mode, state, at, tau * p, energy * p)
                p = p * ratio
                ratio = ratio * growth
                at += STEP
    else:
        while at < stop:
            u = (near + channel) * step
            p = exp2_minus(u * u)
            pass_light(mode, state, at, tau * p, energy * p)
            channel += float32(1.0)
            at += STEP


@njit(**_inline)
def cross_wide(mode, state, at, stop, near, step, tau, energy, span):  # type: ignore[no-untyped-def]
    """The same for a line whose velocity changes by a squared half `span` (in widths) within the crossing."""
    fourth = span * span * float32(-1.0 / 45.0)
    sixth = span * span * span * float32(128.0 / 45360.0)
    channel = float32(0.0)
    while at < stop:
        u = (near + channel) * step
        square = u * u
        p = exp2_minus(square) * skew(square, fourth, sixth)
        pass_light(mode, state, at, tau * p, energy * p)
        channel += float32(1.0)
        at += STEP


@njit(**_opts)
def cross_row(rows, row, offsets, first, last, channels, state):  # type: ignore[no-untyped-def]
    """Apply one row with a single line to channels ``first <= k < last``.

    Parameters
    ----------
    rows : float32, shape (capacity * ROW * LANES,)
    row : int
    offsets : float32, shape (nodes,)
        Sampled velocities of channel 0 in channels, on the scale of the row's velocities.
    channels : int
    state : float32, shape (nodes * channels * STEP,), changed
    """
    base = row * (ROW * LANES)
    tau = load(rows, base)
    energy = load(rows, base + LANES)
    v = load(rows, base + 2 * LANES)
    step = load(rows, base + 3 * LANES) * _SQRT_LOG2_E
    span = load(rows, base + 4 * LANES)
    size = greatest(larger(tau, tau * float32(-1.0)))
    sharp = greatest(span) < float32(SHARP)
    if size >= float32(1.0):
        tau = larger(tau, float32(LEAST_TAU))
    tau = tau * _LOG2_E
    for node in range(offsets.shape[0]):
        near = v * float32(-1.0) + (float32(first) + offsets[node])
        at = (node * channels + first) * STEP
        stop = (node * channels + last) * STEP
        if sharp:
            if size < float32(0.05):
                cross_sharp(THIN, state, at, stop, near, step, tau, energy)
            elif size < float32(1.0):
                cross_sharp(MODERATE, state, at, stop, near, step, tau, energy)
            else:
                cross_sharp(ANY, state, at, stop, near, step, tau, energy)
        elif size < float32(0.05):
            cross_wide(THIN, state, at, stop, near, step, tau, energy, span)
        else:
            cross_wide(ANY, state, at, stop, near, step, tau, energy, span)


@njit(**_opts)
def fold(first, last, channels, nodes, state, folded):  # type: ignore[no-untyped-def]
    """Move what was gathered in channels ``first..last`` since the last fold into float64.

    `folded` is shaped like the state: for each velocity sixteen intensities, then sixteen transmissions.
    """
    for node in range(nodes):
        for k in range(first, last):
            at = (node * channels + k) * STEP
            for lane in range(at, at + LANES):
                through = folded[lane + LANES]
                folded[lane] += through * state[lane]
                through *= 1.0 - state[lane + LANES]
                folded[lane + LANES] = through if through > DARK else 0.0
                state[lane] = 0.0
                state[lane + LANES] = 0.0


@njit(**_opts)
def clear_folded(first, last, channels, nodes, folded):  # type: ignore[no-untyped-def]
    """Start afresh in channels ``first..last``: no intensity, full transmission."""
    for node in range(nodes):
        for at in range((node * channels + first) * STEP, (node * channels + last) * STEP, STEP):
            folded[at : at + LANES] = 0.0
            folded[at + LANES : at + STEP] = 1.0


@njit(**_opts)
def add_line(rows, base, offsets, first, last, channels, sums):  # type: ignore[no-untyped-def]
    """Add one line of a row to the sums of optical depth (in ln 2) and energy, laid out like the state."""
    tau = load(rows, base) * _LOG2_E
    energy = load(rows, base + LANES)
    v = load(rows, base + 2 * LANES)
    step = load(rows, base + 3 * LANES) * _SQRT_LOG2_E
    span = load(rows, base + 4 * LANES)
    fourth = span * span * float32(-1.0 / 45.0)
    sixth = span * span * span * float32(128.0 / 45360.0)
    for node in range(offsets.shape[0]):
        near = v * float32(-1.0) + (float32(first) + offsets[node])
        at = (node * channels + first) * STEP
        stop = (node * channels + last) * STEP
        channel = float32(0.0)
        while at < stop:
            u = (near + channel) * step
            square = u * u
            p = exp2_minus(square) * skew(square, fourth, sixth)
            store(sums, at, fma(tau, p, load(sums, at)))
            store(sums, at + LANES, fma(energy, p, load(sums, at + LANES)))
            channel += float32(1.0)
            at += STEP


@njit(**_opts)
def pass_sums(first, last, channels, nodes, sums, state):  # type: ignore[no-untyped-def]
    """Pass light through the summed lines of a row, then clear the sums."""
    nothing = spread(float32(0.0))
    for node in range(nodes):
        at = (node * channels + first) * STEP
        stop = (node * channels + last) * STEP
        while at < stop:
            s = larger(load(sums, at), float32(LEAST_TAU / np.log(2.0)))
            pass_light(ANY, state, at, s, load(sums, at + LANES))
            store(sums, at, nothing)
            store(sums, at + LANES, nothing)
            at += STEP
