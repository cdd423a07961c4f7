"""The vector type and what a row does to the channels, against numpy in float64."""

from __future__ import annotations

import platform

import numpy as np
import pytest
from numba import float32, njit

from cubeforge.transfer.channel_kernels import (
    ANY,
    MODERATE,
    ROW,
    STEP,
    THIN,
    add_line,
    clear_folded,
    cross_row,
    escape,
    fold,
    pass_sums,
)
from cubeforge.transfer.vectors import (
    LANES,
    exp2_minus,
    flush_denormals,
    fma,
    greatest,
    larger,
    least,
    load,
    one_minus_exp2,
    restore_denormals,
    smaller,
    spread,
    store,
    where_zero,
)


@njit
def each(which, values, out):
    """Apply one function to sixteen values at a time."""
    for i in range(0, values.shape[0], LANES):
        x = load(values, i)
        if which == 0:
            y = exp2_minus(x)
        elif which == 1:
            y = one_minus_exp2(x)
        elif which == 2:
            y = escape(THIN, x)
        elif which == 3:
            y = escape(MODERATE, x)
        else:
            y = escape(ANY, x)
        store(out, i, y)


def applied(which, values):
    x = np.asarray(values, dtype=np.float32)
    padded = np.zeros(-(-len(x) // LANES) * LANES, dtype=np.float32)
    padded[: len(x)] = x
    out = np.empty_like(padded)
    each(which, padded, out)
    return x.astype(np.float64), out[: len(x)].astype(np.float64)


def mean_transmission(s):
    t = s * np.log(2.0)
    return np.divide(-np.expm1(-t), t, out=np.ones_like(t), where=t != 0.0)


def test_powers_of_two():
    x, found = applied(0, np.linspace(-120.0, 125.0, 100_001))
    # Beyond the fit, the argument's own rounding counts: 2^-x with x in float32.
    np.testing.assert_allclose(found, 2.0**-x, rtol=3e-7)
    assert applied(0, [0.0])[1] == 1.0
    far = applied(0, [126.5, 200.0, 1e4, 3e38])[1]
    assert np.all((far > 0.0) & (far <= 2.0**-125.9))  # never a denormal, never zero


def test_what_is_lost_keeps_its_digits():
    x = np.concatenate([10.0 ** np.linspace(-30, 2, 20_000), -(10.0 ** np.linspace(-30, 1, 5_000))])
    x, found = applied(1, x)
    np.testing.assert_allclose(found, -np.expm1(-x * np.log(2.0)), rtol=3e-7)


@pytest.mark.parametrize(("which", "most"), [(2, 0.05), (3, 1.0), (4, 1e4)])
def test_mean_transmission_of_a_crossing(which, most):
    s = 10.0 ** np.linspace(-38, np.log10(most / np.log(2.0)), 20_000)
    x, found = applied(which, np.concatenate([[0.0], s, -s[s < 10.0]]))
    np.testing.assert_allclose(found, mean_transmission(x), rtol=5e-7)


@njit
def arithmetic(a, b, out):
    x, y = load(a, 0), load(b, 0)
    store(out, 0, x + y)
    store(out, 16, x - 2.0)
    store(out, 32, 3 * y)
    store(out, 48, x / y)
    store(out, 64, fma(x, y, float32(1.0)))
    store(out, 80, larger(x, y))
    store(out, 96, smaller(x, float32(0.0)))
    store(out, 112, where_zero(x, float32(7.0), y))
    store(out, 128, spread(a[3]))
    return least(x), greatest(x)


def test_arithmetic_of_vectors():
    rng = np.random.default_rng(5)
    a, b = (rng.normal(size=LANES).astype(np.float32) for _ in range(2))
    a[2] = 0.0
    out = np.empty(9 * LANES, dtype=np.float32)
    assert arithmetic(a, b, out) == (a.min(), a.max())
    wanted = [a + b, a - 2, 3 * b, a / b, a * b + 1, np.maximum(a, b), np.minimum(a, 0), np.where(a == 0, 7, b),
              np.full(LANES, a[3])]  # fmt: skip
    np.testing.assert_allclose(out.reshape(9, LANES), wanted, rtol=3e-7, atol=1e-7)


@njit
def products(values, out):
    before = flush_denormals()
    for i in range(len(values)):
        out[i] = values[i] * values[i]
    restore_denormals(before)


@pytest.mark.skipif(platform.machine() not in ("x86_64", "AMD64"), reason="flushing is for x86 only")
def test_denormals_are_flushed_in_kernels_and_nowhere_else():
    values = np.array([1e-20, 1e-19, 2e-19, 1.0], dtype=np.float32)
    out = np.empty_like(values)
    products(values, out)
    least_normal = np.finfo(np.float32).tiny
    np.testing.assert_array_equal(out[:2], 0.0)  # 1e-40 and 1e-38
    assert out[2] >= least_normal
    assert 0.0 < values[0] * values[0] < least_normal


def row_of(lines):
    """Rows for lists of 16 (tau, energy, v, inv_b, square) each."""
    return np.concatenate([np.asarray(line, dtype=np.float32).T.ravel() for line in lines])


CHANNELS = 60
OFFSETS = np.array([-29.7, -29.5, -29.1], dtype=np.float32)


def expected(crossings, lane):
    """Intensity and transmission of one lane in float64."""
    u = OFFSETS.astype(float)[:, None] + np.arange(CHANNELS)[None, :]
    depth, energy = np.zeros(u.shape), np.zeros(u.shape)
    for line in crossings:
        tau, e, v, inv_b, _ = np.asarray(line, dtype=np.float32)[lane].astype(float)
        p = np.exp(-(((u - v) * inv_b) ** 2))
        depth += tau * p
        energy += e * p
    return energy * mean_transmission(depth / np.log(2.0)), np.exp(-depth)


def random_line(rng, tau):
    return [(tau * rng.uniform(0.1, 1), rng.uniform(1, 9), rng.uniform(-9, 9), rng.uniform(0.1, 2), 0.0)
            for _ in range(LANES)]  # fmt: skip


@pytest.mark.parametrize("tau", [1e-9, 0.04, 0.9, 30.0, -0.5])
def test_a_row_of_one_line(tau):
    line = random_line(np.random.default_rng(7), tau)
    state = np.zeros(len(OFFSETS) * CHANNELS * STEP, dtype=np.float32)
    cross_row(row_of([line]), 0, OFFSETS, 0, CHANNELS, CHANNELS, state)
    found = state.reshape(len(OFFSETS), CHANNELS, 2, LANES).astype(float)
    for lane in range(LANES):
        bright, through = expected([line], lane)
        scale = np.abs(bright).max()
        np.testing.assert_allclose(found[:, :, 0, lane], bright, rtol=1e-5, atol=2e-6 * scale)
        lost = 1.0 - through
        np.testing.assert_allclose(found[:, :, 1, lane], lost, rtol=1e-5, atol=2e-6 * np.abs(lost).max())


@pytest.mark.parametrize("taus", [(0.3, 2.0), (5.0, -1.0, 0.1)])
def test_blended_lines_add_before_the_light_passes(taus):
    rng = np.random.default_rng(8)
    lines = [random_line(rng, tau) for tau in taus]
    rows = row_of(lines)
    state = np.zeros(len(OFFSETS) * CHANNELS * STEP, dtype=np.float32)
    sums = np.zeros_like(state)
    for number in range(len(lines)):
        add_line(rows, number * ROW * LANES, OFFSETS, 0, CHANNELS, CHANNELS, sums)
    pass_sums(0, CHANNELS, CHANNELS, len(OFFSETS), sums, state)
    assert not sums.any()
    found = state.reshape(len(OFFSETS), CHANNELS, 2, LANES).astype(float)
    for lane in range(LANES):
        bright, through = expected(lines, lane)
        np.testing.assert_allclose(found[:, :, 0, lane], bright, rtol=1e-5, atol=3e-6 * np.abs(bright).max())
        np.testing.assert_allclose(
            found[:, :, 1, lane], 1.0 - through, rtol=1e-5, atol=3e-6 * np.abs(1 - through).max()
        )


def test_folding_changes_nothing_but_where_numbers_are():
    rng = np.random.default_rng(9)
    lines = [random_line(rng, tau) for tau in (0.5, 0.01, 2.0, 0.3)]
    size = len(OFFSETS) * CHANNELS * STEP
    totals = []
    for every in (1, 4):
        state, folded = np.zeros(size, dtype=np.float32), np.empty(size)
        clear_folded(0, CHANNELS, CHANNELS, len(OFFSETS), folded)
        for number, line in enumerate(lines, start=1):
            cross_row(row_of([line]), 0, OFFSETS, 0, CHANNELS, CHANNELS, state)
            if number % every == 0:
                fold(0, CHANNELS, CHANNELS, len(OFFSETS), state, folded)
        totals.append(folded)
    np.testing.assert_allclose(totals[0], totals[1], atol=1e-6 * np.abs(totals[0]).max())
