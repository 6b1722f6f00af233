"""Orbits, gravity, neighbours, cooling ages, contaminants; and that the room is light to import."""

import subprocess
import sys

import numpy as np
import pytest
from astropy import constants as const
from astropy import units as u
from hypothesis import given
from hypothesis import strategies as st
from scipy.spatial import cKDTree

from remnantstats.physics import ages, contaminants, orbits

masses = st.floats(0.2, 1.3)


def test_speed_against_astropy():
    expected = np.sqrt(const.G * 0.6 * const.M_sun / const.R_sun).to_value(u.km / u.s)
    assert orbits.orbital_speed(0.6, 1.0) == pytest.approx(expected)


def test_gas_moves_at_several_hundred_to_a_thousand_km_a_second():
    # common practice, no source: several hundred to a thousand km/s about one solar radius, less at larger radii
    speed = orbits.orbital_speed(0.6, [0.15, 0.5, 1.0, 1.5])
    assert 300.0 < speed[2] < 1000.0
    assert np.all(np.diff(speed) < 0)
    assert np.all((speed > 250.0) & (speed < 1000.0))


def test_surface_gravity_is_ten_thousand_suns():
    # common practice, no source: about 10^4 times the Sun's
    ratio = 10 ** (orbits.log_surface_gravity(0.6, 0.0126) - orbits.log_surface_gravity(1.0, 1.0))
    assert 0.2e4 < ratio < 1e4
    assert orbits.log_surface_gravity(1.0, 1.0) == pytest.approx(4.438, abs=0.001)


def test_rock_is_shredded_within_about_a_solar_radius():
    # common practice, no source: 1 to 1.5 solar radii; the fluid and rigid limits bracket it
    assert orbits.roche_distance(0.6) == pytest.approx(1.5, abs=0.2)
    assert orbits.roche_distance(0.6, coefficient=1.26) < 1.0
    by_hand = 2.44 * (3 * 0.6 * const.M_sun / (4 * np.pi * 3.0 * u.g / u.cm**3)) ** (1 / 3)
    assert orbits.roche_distance(0.6, 3.0) == pytest.approx(by_hand.to_value(u.R_sun))


@given(masses, st.floats(7.0, 9.5))
def test_radius_and_gravity_are_inverse(mass, logg):
    assert orbits.log_surface_gravity(mass, orbits.radius_from_gravity(mass, logg)) == pytest.approx(logg)


@given(masses, st.floats(0.01, 10.0), st.floats(1.01, 5.0))
def test_orbits_are_monotone(mass, radius, factor):
    assert orbits.orbital_speed(mass, radius * factor) < orbits.orbital_speed(mass, radius)
    assert orbits.orbital_speed(mass * factor, radius) > orbits.orbital_speed(mass, radius)
    assert orbits.roche_distance(mass, radius * factor) < orbits.roche_distance(mass, radius)


def test_nearest_neighbour_constant():
    # Chandrasekhar 1943, Rev. Mod. Phys. 15, 1
    assert pytest.approx(0.55396, abs=5e-6) == orbits.NEAREST_NEIGHBOUR


def test_nearest_neighbour_against_draws():
    points = np.random.default_rng(1).random((40_000, 3)) * 20.0
    inside = np.all((points > 1.0) & (points < 19.0), axis=1)
    distance = cKDTree(points).query(points[inside], k=2)[0][:, 1]
    assert distance.mean() == pytest.approx(orbits.nearest_neighbour_distance(5.0), rel=0.01)


def test_luminosity_of_the_sun():
    assert ages.luminosity(5772.0, 1.0) == pytest.approx(1.0, rel=1e-3)


def test_mestel_at_ten_thousand_kelvin():
    # common practice, no source: a 0.6 Msun star has cooled for about 0.6 Gyr at 10,000 K
    radius = orbits.radius_from_gravity(0.6, 8.0)
    assert ages.mestel_cooling_age(0.6, ages.luminosity(10_000.0, radius)) == pytest.approx(0.6, rel=0.25)


@given(masses, st.floats(-5.0, 0.0), st.floats(0.01, 2.0))
def test_older_is_fainter(mass, log_luminosity, step):
    age = ages.mestel_cooling_age(mass, 10**log_luminosity)
    fainter = ages.mestel_cooling_age(mass, 10 ** (log_luminosity - step))
    assert 0.0 < age < fainter < np.inf
    assert np.log10(fainter / age) == pytest.approx(5 / 7 * step)
    assert ages.mestel_cooling_age(mass, 10**log_luminosity, mass_number=16.0) < age


def test_chance_alignment():
    assert contaminants.chance_alignment(1.0, 1e-9) == pytest.approx(np.pi * 1e-9, rel=1e-8)
    sources = np.random.default_rng(2).poisson(np.pi * 2.0**2 * 0.05, 200_000)
    assert contaminants.chance_alignment(2.0, 0.05) == pytest.approx(np.mean(sources > 0), abs=0.005)


@given(st.floats(0.0, 20.0), st.floats(0.0, 1.0), st.floats(1.0, 3.0))
def test_chance_alignment_is_a_rising_probability(radius, density, factor):
    value = contaminants.chance_alignment(radius, density)
    assert 0.0 <= value <= 1.0
    assert contaminants.chance_alignment(radius * factor, density) >= value
    assert contaminants.chance_alignment(radius, density * factor) >= value


def test_any_of_several():
    np.testing.assert_allclose(contaminants.any_of([0.1, 0.0, 1.0], 0.2), [0.28, 0.2, 1.0])
    assert contaminants.any_of() == 0.0


def test_hot_stars_are_flagged():
    assert contaminants.hot_stars([25_001.0, 25_000.0, np.nan]).tolist() == [True, False, False]
    assert contaminants.hot_stars([19_000.0], limit=18_000.0).tolist() == [True]


def test_importing_what_needs_no_constants_loads_neither_astropy_nor_pandas():
    code = (
        "import sys, remnantstats; before = set(sys.modules)\n"
        "import remnantstats.physics, remnantstats.physics.initial_final, remnantstats.physics.settling\n"
        "import remnantstats.physics.spectra, remnantstats.physics.contaminants\n"
        "print(sorted({'astropy', 'pandas'} & (set(sys.modules) - before)))"
    )
    shown = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True).stdout
    assert shown.strip() == "[]"
