"""Physics: Stokes-Einstein, water, traps, forces; values with units."""

import subprocess
import sys

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.constants import Boltzmann

import ensembles
from ensembles import physics
from ensembles.quantities import quantity, read_quantity


def test_stokes_einstein_of_a_micrometre_sphere():
    # Check values: 1 µm diameter, IAPWS 2008 viscosities 1.0016 and 0.8900 mPa s at 20 and 25 °C.
    assert_allclose(1e12 * physics.stokes_einstein(0.5e-6, 293.15, 1.0016e-3), 0.428754, rtol=2e-6)
    assert_allclose(1e12 * physics.stokes_einstein(0.5e-6, 298.15, 0.8900e-3), 0.490746, rtol=2e-6)
    # With the correlation in place of the table, to 4 digits.
    assert_allclose(1e12 * physics.stokes_einstein(0.5e-6, 293.15), 0.428754, rtol=1e-4)
    assert_allclose(1e12 * physics.stokes_einstein(0.5e-6, 298.15), 0.490746, rtol=1e-4)


def test_water_viscosity_against_iapws():
    # IAPWS 2008, in mPa s: 20 °C and 25 °C.
    assert_allclose(1e3 * physics.water_viscosity(293.15), 1.0016, rtol=1e-4)
    assert_allclose(1e3 * physics.water_viscosity(298.15), 0.8900, rtol=1e-4)
    # It falls with temperature all the way.
    values = [physics.water_viscosity(t) for t in np.linspace(273.15, 373.15, 60)]
    assert (np.diff(values) < 0).all()


def test_trap_and_force_are_einsteins_relation():
    d, t, k = 0.43e-12, 300.0, 2e-6
    rate = physics.trap_rate(k, d, t)
    assert_allclose(physics.trap_stiffness(rate, d, t), k, rtol=1e-14)
    # Equipartition: the stationary variance D / rate is k_B T / k.
    assert_allclose(d / rate, Boltzmann * t / k, rtol=1e-14)
    # The force of the trap at x is -k x; the drift of its prior is -rate x.
    x = np.array([[1e-6, -2e-6]])
    prior = ensembles.OrnsteinUhlenbeck(rate=rate, centre=0.0, diffusion=d)
    assert_allclose(physics.force_from_drift(prior.drift(x), d, t), -k * x, rtol=1e-12)
    matrix = np.array([[2.0, 0.5], [0.5, 1.0]]) * 1e-12
    assert_allclose(physics.force_from_drift(x, matrix, t) @ matrix, Boltzmann * t * x, rtol=1e-12)


@pytest.mark.parametrize("value", [25.0, 20, 37.0])
def test_celsius_given_as_kelvin(value):
    with pytest.raises(ensembles.InputError, match=rf"must be in kelvin.*{value:g} K; if {value:g} °C is meant, give"):
        physics.stokes_einstein(1e-6, value)


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: physics.temperature(-5), "temperature must be positive"),
        (lambda: physics.temperature(5000), "must be in kelvin"),
        (lambda: physics.water_viscosity(400.0), "water is liquid"),
        (lambda: physics.stokes_einstein(0.0, 300.0), "radius must be positive"),
        (lambda: physics.trap_rate(-1.0, 1e-12, 300.0), "stiffness must be positive"),
        (lambda: physics.force_from_drift([[1.0, 2.0]], np.eye(3), 300.0), "wrong dimension"),
    ],
)
def test_bad_values(make, message):
    with pytest.raises(ensembles.InputError, match=message):
        make()


def test_units_are_read():
    assert read_quantity("0.43 um^2/s", "diffusion", "s", "um") == 0.43
    assert read_quantity("0.43 µm²/s", "diffusion", "s", "µm") == 0.43
    assert_allclose(read_quantity("0.43 um^2/s", "diffusion", "ms", "nm"), 430.0)
    assert read_quantity("10 ps", "time", "ps", "angstrom") == 10.0
    assert_allclose(read_quantity("2e-9 m^2/s", "diffusion", "ps", "Å"), 0.2)
    assert read_quantity(["1 um", 2.0], "centre", "s", "um") == [1.0, 2.0]
    assert read_quantity(0.43, "diffusion", "", "") == 0.43
    assert_allclose(quantity("25 degC", "K"), 298.15)


@pytest.mark.parametrize(
    ("value", "name", "units", "message"),
    [
        ("0.43 um/s", "diffusion", ("s", "um"), "does not match its quantity; it is '0.43 um/s'"),
        ("10 kg", "time", ("s", "um"), "does not match"),
        ("0.43", "diffusion", ("s", "um"), "does not match"),
        ("3 foos", "rate", ("s", "um"), "unit that is not known"),
        ("0.43 um^2/s", "diffusion", ("", "um"), "add time to"),
    ],
)
def test_units_that_do_not_fit(value, name, units, message):
    with pytest.raises(ensembles.InputError, match=message):
        read_quantity(value, name, *units)


def test_units_are_loaded_when_needed():
    code = "import sys, ensembles, ensembles.physics, ensembles.quantities; assert 'pint' not in sys.modules"
    subprocess.run([sys.executable, "-c", code], check=True)
