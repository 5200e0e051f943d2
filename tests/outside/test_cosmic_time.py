"""Cosmic ages and volumes against published values, closed forms and direct integration."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from scipy.integrate import quad

from hurstfit.clock import CosmicClock
from hurstfit.cosmology import cosmology_from

WHERE = "test"
REDSHIFTS = np.array([0.0, 0.1, 0.7, 1.5, 3.0, 6.0, 10.0, 20.0, 30.0])
# 1 / (km/s/Mpc) in Myr: the parsec of IAU 2015 resolution B2 (648000/pi au, au = 149597870.7 km), years of 365.25 days.
HUBBLE_TIME = 1e6 * 648000.0 / np.pi * 149597870.7 / (365.25 * 86400.0) / 1e6


def direct_age(expansion: Callable[[float], float], hubble: float, z: float) -> float:
    """Age in Myr, the integral of da / (a E) over the scale factor a = 1 / (1 + z), with E = H / H0."""
    integral = quad(lambda a: 1.0 / (a * expansion(1.0 / a - 1.0)), 0.0, 1.0 / (1.0 + z), epsabs=0.0, epsrel=1e-11)[0]
    return HUBBLE_TIME / hubble * integral


def test_age_today_in_planck18_is_the_published_one() -> None:
    # Planck 2018 results VI (A&A 641, A6), table 2, last column: 13.787 +- 0.020 Gyr.
    clock = CosmicClock.build(cosmology_from("Planck18", where=WHERE))
    assert abs(float(clock.age(0.0)) - 13787.0) < 20.0


def test_ages_in_planck18_match_direct_integration_of_its_expansion_rate() -> None:
    # Radiation and one massive neutrino included: H(z) from the model, the integral from here.
    model = cosmology_from("Planck18", where=WHERE)
    hubble = model.H0.to_value("km/(Mpc s)")
    expected = [direct_age(lambda x: model.H(x).to_value("km/(Mpc s)") / hubble, hubble, z) for z in REDSHIFTS]
    np.testing.assert_allclose(CosmicClock.build(model).age(REDSHIFTS), expected, rtol=1e-7)


@pytest.mark.parametrize(
    ("matter", "dark", "w0", "wa"),
    [
        (0.3, 0.7, -1.0, 0.0),
        (0.3, 0.9, -1.0, 0.0),
        (0.25, 0.0, -1.0, 0.0),
        (0.3, 0.7, -0.8, 0.5),
        (0.35, 0.5, -1.2, -0.4),
    ],
)
def test_ages_without_radiation_match_direct_integration_written_by_hand(
    matter: float, dark: float, w0: float, wa: float
) -> None:
    def expansion(z: float) -> float:
        # Friedmann's equation; dark energy w = w0 + wa z / (1 + z) (Chevallier & Polarski 2001; Linder 2003).
        growth = (1.0 + z) ** (3.0 * (1.0 + w0 + wa)) * np.exp(-3.0 * wa * z / (1.0 + z))
        curvature = 1.0 - matter - dark
        return np.sqrt(matter * (1.0 + z) ** 3 + curvature * (1.0 + z) ** 2 + dark * growth)

    table = {"H0": 68.0, "Om0": matter, "Ode0": dark, "w0": w0, "wa": wa, "Tcmb0": 0.0}
    clock = CosmicClock.build(cosmology_from(table, where=WHERE))
    expected = [direct_age(expansion, 68.0, z) for z in REDSHIFTS]
    np.testing.assert_allclose(clock.age(REDSHIFTS), expected, rtol=1e-7)


def test_ages_in_a_flat_model_without_radiation_match_the_closed_form() -> None:
    # t = 2 / (3 H0 sqrt(L)) asinh(sqrt(L / M) (1 + z)^(-3/2)): Peebles, Principles of Physical Cosmology, section 13
    # (section from memory).
    clock = CosmicClock.build(cosmology_from({"H0": 70.0, "Om0": 0.3}, where=WHERE), z_max=100.0)
    z = np.append(REDSHIFTS, 100.0)
    expected = np.arcsinh(np.sqrt(0.7 / 0.3) * (1.0 + z) ** -1.5) * 2.0 / (3.0 * np.sqrt(0.7)) * HUBBLE_TIME / 70.0
    np.testing.assert_allclose(clock.age(z), expected, rtol=1e-7)


@pytest.mark.parametrize("spec", ["Planck18", {"H0": 70, "Om0": 0.3, "Ode0": 0.9}, {"H0": 70, "Om0": 0.3, "w0": -0.8, "wa": 0.5}])
def test_weights_are_those_of_the_comoving_volume_of_the_model(spec: object) -> None:
    model = cosmology_from(spec, where=WHERE)
    nodes = CosmicClock.build(model).bin_nodes([0.0, 0.2, 0.5, 2.0], [0.2, 0.5, 2.0, 6.0], order=6)
    gauss = np.polynomial.legendre.leggauss(6)[1]
    expected = gauss * model.differential_comoving_volume(nodes.z).value
    expected /= expected.sum(axis=1, keepdims=True)
    np.testing.assert_allclose(nodes.weight, expected, rtol=1e-7)


def test_the_mean_redshift_of_a_bin_matches_einstein_and_de_sitter() -> None:
    # Matter alone: distance 2 (1 - (1+z)^(-1/2)) and 1/H = (1+z)^(-3/2), in units of c/H0 and 1/H0.
    def volume(z: float) -> float:
        return (1.0 - (1.0 + z) ** -0.5) ** 2 * (1.0 + z) ** -1.5

    nodes = CosmicClock.build(cosmology_from({"H0": 50.0, "Om0": 1.0}, where=WHERE)).bin_nodes([0.3], [1.1])
    expected = quad(lambda z: z * volume(z), 0.3, 1.1)[0] / quad(volume, 0.3, 1.1)[0]
    np.testing.assert_allclose(nodes.average(nodes.z), [expected], rtol=1e-7)
