"""The clock: ages by interpolation, averages over bins."""

from __future__ import annotations

import subprocess
import sys

import numpy as np
import pytest
from scipy.integrate import quad

from hurstfit.clock import ORDER, CosmicClock, step_numbers
from hurstfit.cosmology import cosmology_from
from hurstfit.errors import HurstfitError

WHERE = "demo.toml, [clock] cosmology"
NEUTRINOS = {"H0": 67.0, "Om0": 0.31, "Ode0": 0.75, "Tcmb0": 2.7255, "Neff": 3.04, "m_nu": [0.0, 0.0, 0.06]}


@pytest.fixture(scope="module")
def planck() -> CosmicClock:
    return CosmicClock.build(cosmology_from("Planck18", where=WHERE))


def test_ages_of_an_empty_universe_are_those_of_milne() -> None:
    from astropy.cosmology import LambdaCDM

    # The age is 1 / (H0 (1 + z)), and BEGINNING leaves out exp(-35).
    empty = LambdaCDM(70.0, 0.0, 0.0)
    z = np.array([0.0, 1.0, 30.0])
    np.testing.assert_allclose(CosmicClock.build(empty).age(z), empty.hubble_time.to_value("Myr") / (1.0 + z), rtol=1e-10)


@pytest.mark.parametrize("z_max", [0.5, 30.0, 100.0])
@pytest.mark.parametrize(
    "spec", ["Planck18", {"H0": 70, "Om0": 0.3, "Ode0": 0.8}, {"H0": 70, "Om0": 0.3, "w0": -0.8, "wa": 0.5}, NEUTRINOS]
)
def test_interpolated_ages_match_those_of_the_model(spec: object, z_max: float) -> None:
    model = cosmology_from(spec, where=WHERE)
    clock = CosmicClock.build(model, z_max=z_max)
    # Beyond z = 30 the ages of astropy, good to 1.5e-8 of a Hubble time, are not themselves good to 1e-7.
    z = np.expm1(np.random.default_rng(11).uniform(0.0, np.log1p(min(z_max, 30.0)), 200))
    np.testing.assert_allclose(clock.age(z), model.age(z).to_value("Myr"), rtol=1e-7)


def test_steps_are_differences_of_age_over_the_step_and_broadcast(planck: CosmicClock) -> None:
    z, step, z_start = np.array([0.1, 1.0, 2.5]), np.array([[10.0], [30.0]]), 10.0
    age = planck.cosmology.age
    expected = (age(z) - age(z_start)).to_value("Myr") / step
    n = planck.steps(z, step, z_start)
    assert n.shape == (2, 3)
    # Each age is good to 1e-7, and no age here is above ten times a difference of ages.
    np.testing.assert_allclose(n, expected, rtol=1e-6)
    assert planck.steps(10.0, 30.0, 10.0) == 0.0
    assert planck.steps(12.0, 30.0, 10.0) < 0.0


def test_step_numbers_agree_with_steps_one_proposal_at_a_time(planck: CosmicClock) -> None:
    nodes = planck.bin_nodes([0.2, 1.0], [0.5, 2.0], order=4)
    step, z_start = np.array([15.0, 30.0, 60.0]), np.array([8.0, 10.0, 12.0])
    n = step_numbers(planck.age(nodes.z), planck.age(z_start), step)
    assert n.shape == (3, 2, 4)
    for w in range(3):
        # The same operations on the same numbers.
        np.testing.assert_array_equal(n[w], planck.steps(nodes.z, step[w], z_start[w]))


@pytest.mark.parametrize("z", [-0.1, 30.01, np.nan, [0.1, 31.0]])
def test_a_redshift_outside_the_clock_is_refused(planck: CosmicClock, z: object) -> None:
    with pytest.raises(HurstfitError, match="cosmic ages run from 0 to 30"):
        planck.age(z)


@pytest.mark.parametrize("step", [0.0, -30.0, np.nan])
def test_a_step_that_is_not_positive_is_refused(planck: CosmicClock, step: float) -> None:
    with pytest.raises(ValueError, match="positive number of Myr"):
        planck.steps(0.5, step, 10.0)
    with pytest.raises(ValueError, match="positive number of Myr"):
        step_numbers([[1e4]], [500.0], [step])


@pytest.mark.parametrize(("z_lo", "z_hi"), [(0.1, 1.5), (0.0, 4.0), (0.0, 0.3), (3.0, 4.0)])
@pytest.mark.parametrize("exponent", [-0.1, -0.3, -0.7])
def test_the_average_over_a_bin_matches_adaptive_quadrature(
    planck: CosmicClock, z_lo: float, z_hi: float, exponent: float
) -> None:
    def volume(z: float) -> float:
        return float(planck.cosmology.differential_comoving_volume(z).value)

    def age_power(z: float) -> float:
        return float(planck.age(z)) ** exponent

    def step_power(z: float) -> float:
        return float(planck.steps(z, 30.0, 10.0)) ** exponent

    nodes = planck.bin_nodes([z_lo], [z_hi])
    total = quad(volume, z_lo, z_hi, epsabs=0.0, epsrel=1e-9)[0]
    for function in (age_power, step_power):
        exact = quad(lambda z, f=function: f(z) * volume(z), z_lo, z_hi, epsabs=0.0, epsrel=1e-9)[0] / total
        mean = nodes.average(np.vectorize(function)(nodes.z))
        np.testing.assert_allclose(mean, [exact], rtol=1e-6)


def test_fewer_nodes_would_not_reach_the_accuracy_over_the_widest_bin(planck: CosmicClock) -> None:
    reference = planck.bin_nodes([0.0], [4.0], order=24)
    target = reference.average(planck.age(reference.z) ** -0.3)

    def error(order: int) -> float:
        nodes = planck.bin_nodes([0.0], [4.0], order=order)
        return float(np.abs(nodes.average(planck.age(nodes.z) ** -0.3) / target - 1.0)[0])

    assert error(5) > 1e-5 > 1e-6 > error(ORDER)


def test_weights_sum_to_one_and_nodes_lie_inside_their_bins(planck: CosmicClock) -> None:
    lo, hi = np.array([0.0, 0.2, 1.0]), np.array([0.2, 1.0, 30.0])
    nodes = planck.bin_nodes(lo, hi)
    assert nodes.z.shape == nodes.weight.shape == (3, ORDER)
    assert ((nodes.z > lo[:, None]) & (nodes.z < hi[:, None])).all()
    # A sum of ORDER numbers, each rounded once.
    np.testing.assert_allclose(nodes.weight.sum(axis=1), 1.0, rtol=ORDER * np.finfo(float).eps)


@pytest.mark.parametrize("z", [0.0, 0.7])
def test_a_bin_without_width_is_a_single_redshift(planck: CosmicClock, z: float) -> None:
    nodes = planck.bin_nodes([z], [z])
    np.testing.assert_array_equal(nodes.z, z)
    np.testing.assert_allclose(nodes.average(nodes.z + 1.0), [z + 1.0], rtol=1e-15 * ORDER)


def test_a_redshift_distribution_replaces_the_volume(planck: CosmicClock) -> None:
    # Mean redshift of n(z) proportional to z between a and b: (2/3) (b^3 - a^3) / (b^2 - a^2).
    nodes = planck.bin_nodes([0.5], [1.5], density=lambda z: 7.0 * z)
    np.testing.assert_allclose(nodes.average(nodes.z), [2.0 / 3.0 * (1.5**3 - 0.5**3) / (1.5**2 - 0.5**2)], rtol=1e-14)


@pytest.mark.parametrize("value", [-1.0, 0.0, np.nan, np.inf])
def test_a_redshift_distribution_without_an_average_is_refused(planck: CosmicClock, value: float) -> None:
    with pytest.raises(HurstfitError, match=r"between z = 1 and 2 is negative, zero throughout or not finite"):
        planck.bin_nodes([0.5, 1.0], [0.9, 2.0], density=lambda z: np.where(z > 1.0, value, 1.0))


@pytest.mark.parametrize(("z_lo", "z_hi", "order"), [([1.0], [0.5], 5), ([0.1, 0.2], [0.5], 5), (0.1, 0.5, 5), ([0.1], [0.5], 0)])
def test_edges_that_do_not_make_bins_are_refused(planck: CosmicClock, z_lo: object, z_hi: object, order: int) -> None:
    with pytest.raises(ValueError, match=r"z_lo|node"):
        planck.bin_nodes(z_lo, z_hi, order=order)


@pytest.mark.parametrize("z_max", [0.0, -1.0, np.inf, np.nan])
def test_a_clock_without_a_range_is_refused(planck: CosmicClock, z_max: float) -> None:
    with pytest.raises(ValueError, match="z_max is a positive redshift"):
        CosmicClock.build(planck.cosmology, z_max=z_max)


def test_the_sentence_names_the_model_and_what_sets_its_age(planck: CosmicClock) -> None:
    assert planck.describe() == "Planck18: H0 = 67.66 km/s/Mpc, Om0 = 0.3097, age today 13787 Myr"
    table = {"H0": 70, "Om0": 0.3, "Ode0": 0.8, "w0": -0.9, "wa": 0.2}
    sentence = CosmicClock.build(cosmology_from(table, where=WHERE)).describe()
    assert sentence.startswith("w0waCDM: H0 = 70 km/s/Mpc, Om0 = 0.3, Ode0 = 0.8, w0 = -0.9, wa = 0.2, age today ")


def test_importing_the_clock_does_not_import_the_cosmologies() -> None:
    code = "import sys, hurstfit.clock; sys.exit('astropy.cosmology' in sys.modules)"
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0
