"""Latin-hypercube samples and the bands that they make."""

import numpy as np
import pytest
from scipy.stats import lognorm, spearmanr

from basinwright.confidence import band, latin_hypercube, score_correlation
from basinwright.errors import RangeError


def test_every_slice_of_every_input_is_met_once():
    sample = latin_hypercube(3, "TC-001", 200, 5)
    assert sample.shape == (200, 5)
    assert (np.sort((sample * 200).astype(int), axis=0) == np.arange(200)[:, None]).all()


def test_the_numbers_follow_from_seed_and_outlet_alone():
    assert (latin_hypercube(1, "A", 50, 3) == latin_hypercube(1, "A", 50, 3)).all()
    assert (latin_hypercube(1, "A", 50, 3) != latin_hypercube(2, "A", 50, 3)).any()
    assert (latin_hypercube(1, "A", 50, 3) != latin_hypercube(1, "B", 50, 3)).any()


@pytest.mark.parametrize("rank", [-0.8, 0.3, 0.9])
def test_a_declared_rank_correlation_is_met_and_the_values_stay(rank):
    plain, paired = latin_hypercube(1, "A", 2000, 3), latin_hypercube(1, "A", 2000, 3, {(0, 2): rank})
    assert spearmanr(paired[:, 0], paired[:, 2]).statistic == pytest.approx(rank, abs=0.02)
    assert spearmanr(paired[:, 0], paired[:, 1]).statistic == pytest.approx(0.0, abs=0.02)
    assert (np.sort(plain, axis=0) == np.sort(paired, axis=0)).all()


def test_correlations_that_contradict_each_other():
    with pytest.raises(RangeError, match="contradict"):
        score_correlation(3, {(0, 1): 0.9, (1, 2): 0.9, (0, 2): -0.9})


@pytest.mark.parametrize("samples", [100, 500])
def test_one_monotone_input_gives_its_own_quantiles(samples):
    """The band of f(u) is f at 5, 50 and 95 %: within half a slice of the sample."""
    share = latin_hypercube(1, "A", samples, 1)[:, 0]
    ends = np.array([0.05, 0.5, 0.95])
    for function in (np.exp, lambda u: u**3, lambda u: -np.sqrt(u)):
        low, high = function(ends - 0.5 / samples), function(ends + 0.5 / samples)
        expected = np.sort(np.stack([low, high]), axis=0)
        found = band(function(share))
        if function(1.0) < function(0.0):
            found = found[::-1]
        assert (found >= expected[0]).all()
        assert (found <= expected[1]).all()


def test_the_band_holds_nine_tenths_of_a_synthetic_truth():
    """A product of four uncertain factors: the truth, drawn independently, lies in the band 90 % of the time.

    Of one sample of 500 the two tails are each uncertain by sqrt(0.05 x 0.95 / 500): four of that is 0.055 in all.
    """
    truth = np.random.default_rng(7).random((20_000, 4))

    def result(share):
        return np.prod(0.7 + 0.6 * share, axis=-1)

    covered = []
    for outlet in "ABCDEFGHIJ":
        low, _, high = band(result(latin_hypercube(1, outlet, 500, 4)))
        covered.append(((result(truth) >= low) & (result(truth) <= high)).mean())
    assert np.mean(covered) == pytest.approx(0.90, abs=0.01)
    assert np.abs(np.array(covered) - 0.90).max() < 0.055


def test_the_band_of_a_lognormal_sample_by_another_library():
    share = latin_hypercube(1, "A", 5000, 1)[:, 0]
    expected = lognorm(0.5).ppf([0.05, 0.5, 0.95])
    assert band(lognorm(0.5).ppf(share)) == pytest.approx(expected, rel=0.002)
