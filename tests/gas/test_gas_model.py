"""State of the gas against handbook formulas, and what happens to bad values."""

from __future__ import annotations

import math

import numpy as np
import pytest
from astropy import constants as const
from astropy import units as u

from cubeforge.errors import GasError
from cubeforge.gas.model import Constant, GasModel, StoredField, microturbulence_b

CM_S = u.cm / u.s
STILL = (Constant(0.0), Constant(0.0), Constant(0.0))
MOVING = (StoredField("vx", 1e5), StoredField("vy", 1e5), StoredField("vz", 1e5))


def model(**changes) -> GasModel:
    settings = {"density": StoredField("rho"), "temperature": Constant(10.0), "velocity": STILL} | changes
    return GasModel(**settings)


def raw(*names: str, shape=(3, 4, 5), dtype=np.float64) -> dict[str, np.ndarray]:
    rng = np.random.default_rng(1)
    return {name: rng.uniform(1.0, 2.0, size=shape).astype(dtype) for name in names}


def test_hydrogen_molecules_per_volume():
    # n(H2) = X_H rho / (2 m_H) (definition); with X_H = 0.71 the mass per H2 is 2.82 m_H, against mu = 2.8
    # common for molecular clouds (from memory: Kauffmann et al. 2008, A&A 487, 993, appendix A.1)
    rho = np.full((1, 1, 1), 4.7e-20)
    hydrogen = (1.00782503223 * const.u).cgs.value
    gas = model(abundance=1.2e-4)
    found = gas.state({"rho": rho})
    assert gas.n_h2(rho)[0, 0, 0] == pytest.approx(0.71 * 4.7e-20 / (2 * hydrogen), rel=1e-12)
    assert gas.n_h2(rho)[0, 0, 0] == pytest.approx(4.7e-20 / (2.8 * hydrogen), rel=0.01)
    assert gas.n_h2(rho)[0, 0, 0] == pytest.approx(1e4, rel=0.01)
    assert found.n_molecule[0, 0, 0] == pytest.approx(1.2e-4 * gas.n_h2(rho)[0, 0, 0], rel=1e-14)


def test_thermal_width_of_carbon_monoxide_at_10_kelvin():
    # sigma = sqrt(k T / m), m = 28.01 u: 0.0545 km/s, FWHM 0.128 km/s (Maxwell distribution)
    mass = 28.0101 * const.u
    sigma = np.sqrt(const.k_B * 10 * u.K / mass).to_value(CM_S)
    b = model().line_width(np.array([10.0]), mass.cgs.value)[0]
    assert b / math.sqrt(2) == pytest.approx(sigma, rel=1e-12)
    assert b / math.sqrt(2) == pytest.approx(5.448e3, rel=1e-3)
    assert 2 * math.sqrt(math.log(2)) * b == pytest.approx(1.283e4, rel=1e-3)


def test_microturbulence_adds_in_quadrature():
    gas = model(microturbulence_b=2e4)
    thermal = model().line_width(np.array([10.0, 300.0]), 4.65e-23)
    np.testing.assert_allclose(
        gas.line_width(np.array([10.0, 300.0]), 4.65e-23), np.hypot(thermal, 2e4), rtol=1e-14
    )


def test_microturbulence_says_which_width_it_is():
    # FWHM = 2 sqrt(2 ln 2) sigma (any handbook)
    sigma = 0.3
    b = microturbulence_b(sigma=sigma)
    assert b == pytest.approx(math.sqrt(2) * sigma)
    assert microturbulence_b(fwhm=2 * math.sqrt(2 * math.log(2)) * sigma) == pytest.approx(b)
    assert microturbulence_b(b=b) == b
    for wrong in ({}, {"b": 1.0, "sigma": 1.0}, {"fwhm": -1.0}, {"b": math.nan}):
        with pytest.raises(GasError, match="microturbulence"):
            microturbulence_b(**wrong)


@pytest.mark.parametrize("dtype", [np.float32, np.float64])
def test_stored_units_are_turned_into_cgs(dtype):
    fields = raw("rho", "T", "vx", "vy", "vz", dtype=dtype)
    gas = GasModel(StoredField("rho", 6.77e-23), StoredField("T"), MOVING)
    assert gas.required_fields() == ("rho", "T", "vx", "vy", "vz")
    state = gas.state(fields)
    np.testing.assert_allclose(state.density, fields["rho"].astype(float) * 6.77e-23, rtol=1e-14)
    np.testing.assert_allclose(state.temperature, fields["T"].astype(float), rtol=1e-14)
    for component, name in zip(state.velocity, ("vx", "vy", "vz"), strict=True):
        np.testing.assert_allclose(component, fields[name].astype(float) * 1e5, rtol=1e-14)
        assert component.shape == (3, 4, 5)
        assert component.dtype == np.float64


def test_any_memory_order_and_mixed_types_and_exact_constants():
    fields = raw("rho", dtype=np.float32)
    wanted = fields["rho"].astype(float)
    state = model(temperature=Constant(10.1)).state({"rho": np.asfortranarray(fields["rho"])})
    np.testing.assert_array_equal(state.density, wanted)
    assert (state.temperature == 10.1).all()
    mixed = model(temperature=StoredField("T")).state({"rho": fields["rho"], "T": raw("T")["T"]})
    np.testing.assert_array_equal(mixed.density, wanted)
    np.testing.assert_array_equal(mixed.temperature, raw("T")["T"])


def test_momentum_over_density():
    fields = raw("rho", "mx", "my", "mz")
    momentum = (StoredField("mx", 3e-16), StoredField("my", 3e-16), StoredField("mz", 3e-16))
    state = model(density=StoredField("rho", 2e-20), velocity=None, momentum=momentum).state(fields)
    np.testing.assert_allclose(state.velocity[1], 1.5e4 * fields["my"] / fields["rho"], rtol=1e-13)


def test_temperature_from_pressure():
    # ideal gas: P = rho k T / (mu m_H); 10 K molecular gas at 4e-20 g/cm3
    fields = {"rho": np.full((1, 1, 2), 4e-20), "P": np.array([[[1.0, 2.0]]])}
    hydrogen = 1.00782503223 * const.u
    wanted = (2.33 * hydrogen * 1e-11 * u.dyn / u.cm**2 / (4e-20 * u.g / u.cm**3) / const.k_B).to_value(u.K)
    state = model(temperature=None, pressure=StoredField("P", 1e-11)).state(fields)
    np.testing.assert_allclose(state.temperature[0, 0], [wanted, 2 * wanted], rtol=1e-12)
    speed = 1.88e4  # isothermal sound speed sqrt(P/rho) of 10 K gas, 0.188 km/s (common practice)
    ten = model(temperature=None, pressure=StoredField("P", 4e-20 * speed**2)).state(fields)
    assert ten.temperature[0, 0, 0] == pytest.approx(10.0, rel=0.01)


BAD = [
    ("rho", -1.0, "rho is negative in 1 leaf cell, first at \\(1, 2, 3\\)"),
    ("rho", np.nan, "rho is not finite"),
    ("T", 0.0, "T is not positive"),
    ("T", np.inf, "T is not finite"),
    ("vy", np.nan, "vy is not finite"),
    ("vz", -np.inf, "vz is not finite"),
]


@pytest.mark.parametrize(("field", "value", "words"), BAD)
@pytest.mark.parametrize("dtype", [np.float32, np.float64])
def test_bad_leaf_cells_stop_or_are_made_transparent_and_covered_ones_do_neither(field, value, words, dtype):
    fields = raw("rho", "T", "vx", "vy", "vz", dtype=dtype)
    good = GasModel(StoredField("rho"), StoredField("T"), MOVING).state(fields)
    fields[field][1, 2, 3] = value
    gas = GasModel(StoredField("rho"), StoredField("T"), MOVING)
    with pytest.raises(GasError, match=words):
        gas.state(fields, where="patch 7 of level 2")
    with pytest.raises(GasError, match="patch 7 of level 2"):
        gas.state(fields, np.ones((3, 4, 5), dtype=bool), where="patch 7 of level 2")

    clipped = GasModel(StoredField("rho"), StoredField("T"), MOVING, bad_cells="clear").state(fields)
    assert clipped.mended_cells == 1
    assert [(f.field, f.count, f.first) for f in clipped.mended] == [(field, 1, (1, 2, 3))]
    assert clipped.density[1, 2, 3] == 0.0
    assert clipped.n_molecule[1, 2, 3] == 0.0
    others = np.ones((3, 4, 5), dtype=bool)
    others[1, 2, 3] = False
    pairs = zip(
        (clipped.density, clipped.temperature, clipped.n_molecule, *clipped.velocity),
        (good.density, good.temperature, good.n_molecule, *good.velocity),
        strict=True,
    )
    for mended, before in pairs:
        assert np.isfinite(mended).all()
        np.testing.assert_array_equal(mended[others], before[others])

    covered = gas.state(fields, others)
    assert covered.mended == ()
    assert covered.mended_cells == 0
    assert covered.n_molecule[1, 2, 3] == 0.0
    assert np.isfinite(covered.temperature).all()


@pytest.mark.parametrize("thermal", [{"temperature": StoredField("T")}, {"pressure": StoredField("T")}])
def test_cells_without_gas_are_no_mistake(thermal):
    fields = raw("rho", "T", "vx", "vy", "vz")
    fields["rho"][1, 2, 3] = 0.0
    fields["T"][1, 2, 3] = 0.0
    fields["vx"][1, 2, 3] = np.nan
    state = GasModel(StoredField("rho"), velocity=MOVING, **thermal).state(fields)
    assert state.mended == ()
    assert state.n_molecule[1, 2, 3] == state.density[1, 2, 3] == 0.0
    assert np.isfinite(state.temperature).all()
    assert np.isfinite(state.velocity[0]).all()


def test_every_kind_of_bad_value_is_listed_with_its_count_and_first_place():
    fields = raw("rho", "T")
    fields["rho"][0, 0, 1] = fields["rho"][2, 0, 0] = -1.0
    fields["rho"][1, 1, 1] = np.nan
    fields["T"][2, 0, 0] = 0.0
    leaf = np.ones((3, 4, 5), dtype=bool)
    leaf[0, 0, 1] = False
    state = model(temperature=StoredField("T"), bad_cells="clear").state(fields, leaf)
    found = [(f.field, f.reason, f.count, f.first) for f in state.mended]
    assert found == [
        ("rho", "not finite", 1, (1, 1, 1)),
        ("rho", "negative", 1, (2, 0, 0)),
        ("T", "not positive", 1, (2, 0, 0)),
    ]
    assert state.mended_cells == 2


def test_bad_density_under_pressure_and_momentum_leaves_nothing_strange():
    fields = raw("rho", "P", "mx", "my", "mz")
    fields["rho"][0, 0, 0] = -1.0
    momentum = (StoredField("mx"), StoredField("my"), StoredField("mz"))
    gas = GasModel(StoredField("rho"), pressure=StoredField("P"), momentum=momentum, bad_cells="clear")
    state = gas.state(fields)
    assert [(f.field, f.count) for f in state.mended] == [("rho", 1)]
    assert [float(v[0, 0, 0]) for v in state.velocity] == [0.0, 0.0, 0.0]
    fields = raw("rho", "P", "mx", "my", "mz")
    fields["P"][0, 0, 0] = -1.0
    with pytest.raises(GasError, match=r"temperature \(from P and rho\) is not positive"):
        GasModel(StoredField("rho"), pressure=StoredField("P"), momentum=momentum).state(fields)


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"temperature": None}, "none of temperature and pressure"),
        ({"pressure": StoredField("P")}, "temperature and pressure"),
        ({"velocity": None}, "none of velocity and momentum"),
        ({"hydrogen_fraction": 1.2}, "hydrogen_fraction = 1.2"),
        ({"abundance": 0.0}, "abundance"),
        ({"mean_molecular_weight": math.inf}, "mean_molecular_weight"),
        ({"microturbulence_b": -1.0}, "microturbulence_b"),
        ({"temperature": Constant(0.0)}, "temperature is constant"),
        ({"bad_cells": "ignore"}, "bad_cells"),
        ({"density": Constant(1e-20)}, "every quantity is a constant"),
    ],
)
def test_models_that_cannot_work_are_refused(changes, words):
    with pytest.raises(GasError, match=words):
        model(**changes)


def test_fields_that_do_not_fit_are_refused():
    with pytest.raises(GasError, match=r"needs rho; found density"):
        model().state({"density": np.ones((2, 2, 2))})
    with pytest.raises(GasError, match="differ in shape"):
        model(temperature=StoredField("T")).state({"rho": np.ones((2, 2, 2)), "T": np.ones((2, 2, 1))})
    with pytest.raises(GasError, match="leaf mask of shape"):
        model().state({"rho": np.ones((2, 2, 2))}, np.ones((2, 2, 1), dtype=bool))
    with pytest.raises(GasError, match="stored unit"):
        StoredField("rho", 0.0)
