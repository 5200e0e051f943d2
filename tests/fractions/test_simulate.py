"""One batch of walks: against a plain recount of the same walks, and against independent walks."""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass, field

import numpy as np
import pytest
import scipy.fft
from numpy.typing import NDArray
from scipy import stats

from hurstfit.fractions.axes import TableAxes
from hurstfit.fractions.simulate import BATCH_WALKS, BatchResult, simulate_batch
from hurstfit.walks import noise as noise_module
from hurstfit.walks.noise import NOISE_TYPES, NoiseType, TypeI, TypeII, draw_noise
from hurstfit.walks.reflect import formed_mass, reflect

AXES = TableAxes(
    h=np.array([0.3, 0.8, 1.0]),
    steps=np.array([1, 4, 9, 25]),
    masses=np.array([0.0, 0.1, 0.5]),
    # windows of 1, sqrt(n) and n steps, which are whole numbers at these n
    scales=np.array([0.0, 0.5, 1.0]),
    thresholds=np.array([0.05, 0.2, 1.5]),
)
WINDOWS = {1: (1, 1, 1), 4: (1, 2, 4), 9: (1, 3, 9), 25: (1, 5, 25)}
# Fractions are kept in single precision.
SINGLE = 1e-6
# The statistical tests fail by chance once in a thousand over all their comparisons (Bonferroni), at a fixed seed.
FALSE_ALARM = 1e-3


@dataclass(frozen=True)
class Recount:
    """Numbers of walks at every node, and how many of them rounding could move across a border."""

    quiescent: NDArray[np.int64]
    members: NDArray[np.int64]
    unsure: NDArray[np.int64]


def recount(increments: NDArray[np.float64]) -> Recount:
    """Count by the definitions, one node at a time, the walks of one H; `increments` has shape (walks, n)."""
    rates = reflect(increments)
    masses = formed_mass(rates)
    # the rate before it is cut off at zero: a walk rests exactly where this is not positive
    raw = increments + np.concatenate([np.zeros((len(rates), 1)), rates[:, :-1]], axis=1)
    shape = AXES.shape[1:]
    quiescent, members, unsure = (np.zeros(s, dtype=np.int64) for s in (shape, shape[:2], shape))
    for j, t in enumerate(AXES.steps):
        mass = masses[:, t - 1]
        for p in range(shape[1]):
            limit = None if p == 0 else AXES.masses[p - 1] * mass.mean()
            within = np.ones(mass.size, dtype=bool) if limit is None else mass > limit
            near_limit = np.zeros(mass.size, dtype=bool) if not limit else np.abs(mass / limit - 1) < 1e-5
            members[j, p] = within.sum()
            for w, width in enumerate(WINDOWS[int(t)]):
                recent = rates[:, t - width : t]
                with np.errstate(invalid="ignore", divide="ignore"):
                    q = recent.mean(axis=1) / (mass / t)
                for c in range(shape[3]):
                    if c == 0:
                        hit = (recent == 0).all(axis=1)
                        near = np.abs(raw[:, t - width : t]).min(axis=1) < 1e-5
                    else:
                        theta = AXES.thresholds[c - 1]
                        hit = (q < theta) | (mass == 0)
                        near = np.abs(q / theta - 1) < 1e-5
                    quiescent[j, p, w, c] = (hit & within).sum()
                    unsure[j, p, w, c] = (near | near_limit).sum()
    return Recount(quiescent, members, unsure)


def counts(result: BatchResult) -> NDArray[np.int64]:
    return np.rint(result.fraction.astype(float) * result.members[..., None, None]).astype(np.int64)


@pytest.mark.parametrize("kind", [TypeI, TypeII])
def test_a_batch_counts_its_walks_as_a_plain_recount_does(kind: type[NoiseType], monkeypatch: pytest.MonkeyPatch) -> None:
    spectra: list[NDArray[np.complex64]] = []

    @dataclass(frozen=True)
    class Watched(kind):  # type: ignore[valid-type,misc]
        seen: list[NDArray[np.complex64]] = field(default_factory=lambda: spectra)

        def white_spectrum(self, n: int, columns: int, rng: np.random.Generator) -> NDArray[np.complex64]:
            spectrum = super().white_spectrum(n, columns, rng)
            self.seen.append(spectrum.copy())
            return spectrum

    noise = kind().name
    monkeypatch.setitem(noise_module.NOISE_TYPES, noise, Watched())
    result = simulate_batch(noise, AXES, BATCH_WALKS, np.random.default_rng(301))
    n = int(AXES.steps[-1])
    for i, H in enumerate(AXES.h):
        # in double precision, and from the definitions: both parts of the transform, each stretch of it, either sign
        walks = []
        for spectrum in spectra:
            x = scipy.fft.ifft(spectrum.astype(complex) * kind().transfer(float(H), n)[:, None], axis=0)
            for start in range(0, n * kind().windows, n):
                part = x[start : start + n].T
                walks += [part.real, -part.real, part.imag, -part.imag]
        increments = np.concatenate(walks)
        assert increments.shape == (BATCH_WALKS, n)
        plain = recount(increments)
        # Increments are rounded to single precision: only walks within 1e-5 of a border may be counted otherwise.
        assert (np.abs(result.members[i] - plain.members) <= plain.unsure.max(axis=(-1, -2))).all()
        assert (np.abs(counts(result)[i] - plain.quiescent) <= plain.unsure).all()
        assert plain.unsure.mean() < 1e-3 * BATCH_WALKS


@pytest.mark.parametrize("noise", NOISE_TYPES)
def test_walks_that_share_random_numbers_do_not_bias_the_fractions(noise: str) -> None:
    rng = np.random.default_rng(302)
    batches = [simulate_batch(noise, AXES, BATCH_WALKS, rng).fraction.astype(float) for _ in range(16)]
    mean, se = np.mean(batches, axis=0), np.std(batches, axis=0, ddof=1) / 4
    z = []
    for i, H in enumerate(AXES.h):
        plain = recount(draw_noise(noise, float(H), int(AXES.steps[-1]), 60_000, rng))
        members = np.maximum(plain.members, 1)[..., None, None]
        share = plain.quiescent / members
        # Agresti & Coull's two added successes and failures keep the variance away from zero.
        smoothed = (plain.quiescent + 2) / (members + 4)
        variance = se[i] ** 2 + smoothed * (1 - smoothed) / members
        z.append((mean[i] - share) / np.sqrt(variance))
    # At least as many degrees of freedom as the batches have.
    assert np.abs(z).max() < stats.t.isf(FALSE_ALARM / (2 * np.size(z)), 15)


def test_a_batch_depends_on_its_generator_and_on_nothing_else() -> None:
    first, again, other = (simulate_batch("type-II", AXES, BATCH_WALKS, np.random.default_rng(s)) for s in (303, 303, 304))
    np.testing.assert_array_equal(first.fraction, again.fraction)
    np.testing.assert_array_equal(first.members, again.members)
    assert not np.array_equal(first.fraction, other.fraction)


def test_a_longer_table_holds_the_same_kind_of_walks() -> None:
    # A table that goes on to n = 64 must say about n = 25 what one that ends there says.
    longer = dataclasses.replace(AXES, steps=np.append(AXES.steps, 64))
    batches = {}
    for name, axes in (("short", AXES), ("long", longer)):
        rng = np.random.default_rng(305)
        batches[name] = np.array(
            [simulate_batch("type-I", axes, BATCH_WALKS, rng).fraction[:, :4].astype(float) for _ in range(12)]
        )
    difference = batches["short"].mean(axis=0) - batches["long"].mean(axis=0)
    variance = sum(b.var(axis=0, ddof=1) / 12 for b in batches.values())
    scattering = variance > 0
    z = difference[scattering] / np.sqrt(variance[scattering])
    # Welch's degrees of freedom are at least 11.
    assert np.abs(z).max() < stats.t.isf(FALSE_ALARM / (2 * z.size), 11)
    # Some nodes are the same in every batch: those where no walk, or every walk, is quiescent; and H = 1 of type I.
    np.testing.assert_allclose(difference[~scattering], 0.0, atol=1e-7)


@pytest.mark.parametrize("noise", NOISE_TYPES)
def test_fractions_nest_as_their_definitions_do(noise: str) -> None:
    result = simulate_batch(noise, AXES, BATCH_WALKS, np.random.default_rng(306))
    share, members = result.fraction.astype(float), result.members
    assert share.shape == AXES.shape
    assert members.shape == AXES.shape[:3]
    assert (members[..., 0] == BATCH_WALKS).all()
    assert (np.diff(members, axis=-1) <= 0).all()
    # at zero over a longer window is rarer; below a higher threshold, zero included, is more common
    assert (np.diff(share[..., 0], axis=-1) <= SINGLE).all()
    assert (np.diff(share, axis=-1) >= -SINGLE).all()
    # at one step all windows are the same
    np.testing.assert_allclose(share[:, 0], share[:, 0, :, :1] * np.ones((3, 1)), rtol=0, atol=SINGLE)


@pytest.mark.parametrize("noise", NOISE_TYPES)
def test_a_window_as_long_as_the_walk_sees_the_mean_rate_itself(noise: str) -> None:
    result = simulate_batch(noise, AXES, BATCH_WALKS, np.random.default_rng(307))
    whole_life = result.fraction[:, :, :, 2].astype(float)
    # at zero throughout its life, and without mass, is the same thing
    no_mass = 1 - result.members[:, :, 1] / BATCH_WALKS
    np.testing.assert_allclose(whole_life[:, :, 0, 0], no_mass, rtol=0, atol=SINGLE)
    np.testing.assert_allclose(whole_life[:, :, 1:, 0], 0.0, rtol=0, atol=SINGLE)
    # q = 1 for every walk with mass: below 1.5 all are, below 0.2 none
    np.testing.assert_allclose(whole_life[:, :, 1:, 3], 1.0, rtol=0, atol=SINGLE)
    np.testing.assert_allclose(whole_life[:, :, 1:, 1:3], 0.0, rtol=0, atol=SINGLE)


def test_at_the_limit_of_type_1_half_of_all_walks_are_at_zero_and_none_with_mass() -> None:
    result = simulate_batch("type-I", AXES, BATCH_WALKS, np.random.default_rng(308))
    # half to the last walk: each has its mirror image in the batch
    np.testing.assert_allclose(result.fraction[2, :, 0, :, 0], 0.5, rtol=0, atol=SINGLE)
    np.testing.assert_allclose(result.fraction[2, :, 1:, :, 0], 0.0, rtol=0, atol=SINGLE)


def test_progress_adds_up_to_the_walk_steps_done() -> None:
    done: list[int] = []
    simulate_batch("type-II", AXES, 2 * BATCH_WALKS, np.random.default_rng(309), done.append)
    assert sum(done) == 2 * BATCH_WALKS * 25 * AXES.h.size
    assert len(done) > 1


@pytest.mark.parametrize("walks", [0, -BATCH_WALKS, 1, BATCH_WALKS + 1])
def test_a_batch_of_another_size_is_refused(walks: int) -> None:
    with pytest.raises(ValueError, match=f"multiple of {BATCH_WALKS}, not {walks}"):
        simulate_batch("type-I", AXES, walks, np.random.default_rng(0))


@pytest.mark.parametrize(
    "change",
    [
        {"h": np.array([0.5, 0.5])},
        {"steps": np.array([0, 1])},
        {"masses": np.array([0.1, 0.2])},
        {"scales": np.array([0.5, 1.0])},
        {"thresholds": np.array([0.0, 0.2])},
        {"h": np.array([])},
    ],
)
def test_axes_that_cannot_be_filled_are_refused(change: dict[str, NDArray[np.float64]]) -> None:
    with pytest.raises(ValueError, match=r"increasing numbers|steps start at 1|scales run from 0"):
        dataclasses.replace(AXES, **change)
