"""What a crossing does to the radiation in each channel, in float32.

Between two folds a ray carries, for each channel, ``bright``: the intensity gathered, and ``lost = 1 - T``:
the share of the light from behind that is gone. Kept as ``lost``, a thousand thin crossings don't drown
in the rounding of a transmission close to 1, and an opaque channel ends at 1 rather than in denormals. Every
`FOLD` crossings of the ray (counted from its start, so that the bytes depend on nothing else) both are folded
into float64.

Polynomials: Chebyshev fits; relative errors in float32, measured against float64, are beside them.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numba import float32, njit

# Contraction (fused multiply-add) is safe here; reassociation is not, as it would fold away the rounding trick.
_opts = {"nogil": True, "cache": True, "error_model": "numpy", "fastmath": {"contract"}}
Array = Any

FOLD = 64
"""Crossings between two folds into float64."""
DARK = 1e-30
"""A transmission below this is set to zero."""
LEAST_TAU = -10.0
"""Bound on the optical depth of one crossing of inverted (amplifying) gas."""

_LOG2_E = float32(1.4426950408889634)
_ROUND = float32(12582912.0)
_P0, _P1, _P2 = float32(0.6931471824645996), float32(0.24022650718688965), float32(0.055503569543361664)
_P3, _P4, _P5 = float32(0.009618056938052177), float32(0.0013390866806730628), float32(0.00015461447765119374)


@njit(**_opts)
def exp_minus(s):  # type: ignore[no-untyped-def]
    """exp(-s) for -87 <= s, to 1e-7 (0 becomes 1e-38 far out: never a denormal)."""
    y = max(-s * _LOG2_E, float32(-126.0))
    m = y + _ROUND
    f = y - (m - _ROUND)
    q = ((((_P5 * f + _P4) * f + _P3) * f + _P2) * f + _P1) * f + _P0
    scale = np.int32((np.float32(m).view(np.int32) << 23) + (127 << 23)).view(np.float32)
    return scale + scale * (f * q)


@njit(**_opts)
def one_minus_exp(s):  # type: ignore[no-untyped-def]
    """1 - exp(-s) for any s >= -87, without cancellation, to 2e-7."""
    y = max(-s * _LOG2_E, float32(-126.0))
    m = y + _ROUND
    f = y - (m - _ROUND)
    q = ((((_P5 * f + _P4) * f + _P3) * f + _P2) * f + _P1) * f + _P0
    scale = np.int32((np.float32(m).view(np.int32) << 23) + (127 << 23)).view(np.float32)
    return (float32(1.0) - scale) - scale * (f * q)


@njit(**_opts)
def escape_thin(s):  # type: ignore[no-untyped-def]
    """(1 - exp(-s)) / s for abs(s) <= 0.05, to 1e-7."""
    p = float32(-0.04167100787162781) * s + float32(0.1666875034570694)
    return (p * s + float32(-0.5)) * s + float32(1.0)


@njit(**_opts)
def escape_moderate(s):  # type: ignore[no-untyped-def]
    """(1 - exp(-s)) / s for abs(s) <= 1, to 2e-7."""
    p = float32(-2.542885522416327e-05) * s + float32(0.00020399517961777747)
    p = p * s + float32(-0.00138841662555933)
    p = p * s + float32(0.008329829201102257)
    p = p * s + float32(-0.041666798293590546)
    p = p * s + float32(0.1666673719882965)
    return (p * s + float32(-0.5)) * s + float32(1.0)


@njit(**_opts)
def escape_any(s):  # type: ignore[no-untyped-def]
    """(1 - exp(-s)) / s for any s, 1 at s = 0."""
    return one_minus_exp(s) / s if s != float32(0.0) else float32(1.0)


@njit(**_opts)
def line_thin(nodes, v, inv_b, tau, energy, bright, lost):  # type: ignore[no-untyped-def]
    """One Gaussian line on a window of channels, the crossing's peak optical depth below 0.05."""
    for k in range(nodes.shape[0]):
        x = (nodes[k] - v) * inv_b
        p = exp_minus(x * x)
        s = tau * p
        g = escape_thin(s) * (float32(1.0) - lost[k])
        bright[k] += g * (energy * p)
        lost[k] += g * s


@njit(**_opts)
def line_moderate(nodes, v, inv_b, tau, energy, bright, lost):  # type: ignore[no-untyped-def]
    """The same below 1."""
    for k in range(nodes.shape[0]):
        x = (nodes[k] - v) * inv_b
        p = exp_minus(x * x)
        s = tau * p
        g = escape_moderate(s) * (float32(1.0) - lost[k])
        bright[k] += g * (energy * p)
        lost[k] += g * s


@njit(**_opts)
def line_any(nodes, v, inv_b, tau, energy, bright, lost):  # type: ignore[no-untyped-def]
    """The same for any optical depth."""
    for k in range(nodes.shape[0]):
        x = (nodes[k] - v) * inv_b
        p = exp_minus(x * x)
        s = tau * p
        g = escape_any(s) * (float32(1.0) - lost[k])
        bright[k] += g * (energy * p)
        lost[k] += g * s


@njit(**_opts)
def add_line(nodes, v, inv_b, tau, energy, depth, source):  # type: ignore[no-untyped-def]
    """Add one component's optical depth and emission to the sums of this crossing."""
    for k in range(nodes.shape[0]):
        x = (nodes[k] - v) * inv_b
        p = exp_minus(x * x)
        depth[k] += tau * p
        source[k] += energy * p


@njit(**_opts)
def transfer_sum(depth, source, bright, lost):  # type: ignore[no-untyped-def]
    """Pass light through the summed components of one crossing, then clear the sums."""
    for k in range(depth.shape[0]):
        s = max(depth[k], float32(LEAST_TAU))
        g = escape_any(s) * (float32(1.0) - lost[k])
        bright[k] += g * source[k]
        lost[k] += g * s
        depth[k] = float32(0.0)
        source[k] = float32(0.0)


@njit(**_opts)
def fold(k0: int, k1: int, bright: Array, lost: Array, total: Array, through: Array) -> None:
    """Move what was gathered since the last fold into float64: `total` intensity, `through` transmission."""
    for node in range(bright.shape[0]):
        for k in range(k0, k1):
            total[node, k] += through[node, k] * bright[node, k]
            t = through[node, k] * (1.0 - lost[node, k])
            through[node, k] = t if t > DARK else 0.0
            bright[node, k] = 0.0
            lost[node, k] = 0.0


@njit(**_opts)
def window(v: float, half: float, reach: float, channels: int) -> tuple[int, int]:
    """Channels ``k0 <= k < k1`` with a node within `half` of `v`; channel k's nodes lie in ``k +- reach``."""
    low = v - half - reach
    high = v + half + reach
    if high < 0.0 or low > channels - 1:
        return 0, 0
    k0 = int(math.ceil(low)) if low > 0.0 else 0
    k1 = int(math.floor(high)) + 1 if high < channels - 1 else channels
    return k0, k1


@njit(**_opts)
def outside_share(v: float, inv_b: float, channels: int) -> float:
    """Share of a Gaussian line at `v` (in channels) that falls outside the band of `channels` channels."""
    below = (v + 0.5) * inv_b
    above = (channels - 0.5 - v) * inv_b
    if below > 4.0 and above > 4.0:
        return 0.0
    return 0.5 * math.erfc(below) + 0.5 * math.erfc(above)
