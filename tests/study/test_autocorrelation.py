"""Weights against closed forms, a dense slow twin, and simulated Ornstein–Uhlenbeck tracks."""

import numpy as np
import pandas as pd
import pytest
from scipy import stats

from bayesrange.study import OrnsteinUhlenbeck, autocorrelation_weights, interval_weights


def track(rng, interval_h, tau_h, error_m=0.0, animal="A1", sd_m=300.0):
    """Exact simulation of a stationary OU position, seen with error."""
    phi = np.exp(-np.asarray(interval_h) / tau_h)
    place = np.empty((len(phi) + 1, 2))
    place[0] = rng.normal(size=2)
    noise = rng.normal(size=(len(phi), 2)) * np.sqrt(1 - phi**2)[:, None]
    for k, keep in enumerate(phi):
        place[k + 1] = keep * place[k] + noise[k]
    place = sd_m * place + error_m * rng.normal(size=place.shape) + (500_000, 5_600_000)
    return frame(interval_h, place, error_m, animal)


def frame(interval_h, place, error_m, animal):
    hours = np.concatenate([[0.0], np.cumsum(interval_h)])
    time = pd.Timestamp("2031-03-01", tz="UTC") + pd.to_timedelta(np.round(hours * 3600), unit="s")
    table = pd.DataFrame({"time": time, "x": place[:, 0], "y": place[:, 1]})
    return table.assign(animal=animal, error_m=error_m)


# GLS effective size of an AR(1) or OU mean, 1ᵀR⁻¹1, derived: (n, correlation of neighbours, effective)
GLS = [(100, 0.9, 6.21053), (1000, 0.9, 53.57895), (1000, 0.5, 334.000), (500, np.exp(-1 / 10), 25.92923)]


@pytest.mark.parametrize(("n", "phi", "expected"), GLS)
def test_weights_sum_to_the_gls_effective_size(n, phi, expected):
    assert interval_weights(np.ones(n - 1), -1 / np.log(phi)).sum() == pytest.approx(expected, rel=1e-6)  # as printed


def test_closely_spaced_fixes_tend_to_the_continuous_record():
    assert interval_weights(np.full(20_000, 100 / 20_000), 5.0).sum() == pytest.approx(
        11, rel=1e-6
    )  # 1 + T/2τ, error ∝ Δ²


def test_weights_sum_to_the_dense_inverse_for_irregular_times():
    interval = np.random.default_rng(1).exponential(3, 60)
    hours = np.concatenate([[0], np.cumsum(interval)])
    dense = np.exp(-np.abs(hours[:, None] - hours) / 7)
    assert interval_weights(interval, 7.0).sum() == pytest.approx(np.linalg.solve(dense, np.ones(61)).sum(), rel=1e-10)


@pytest.mark.parametrize("error_m", [0.0, 20.0])
def test_restricted_likelihood_is_the_dense_gaussian_one(error_m):
    rng = np.random.default_rng(4)
    interval = rng.exponential(2, 39)
    place = track(rng, interval, 7.0, error_m)[["x", "y"]].to_numpy()
    error = error_m * rng.uniform(0, 2, 40) * (np.arange(40) % 4 > 0)  # some fixes are exact
    fit = OrnsteinUhlenbeck(interval, place, error)
    hours = np.concatenate([[0], np.cumsum(interval)])

    def dense(tau, variance):
        cov = variance * np.exp(-np.abs(hours[:, None] - hours) / tau) + np.diag(error**2)
        contrast = np.linalg.qr(np.column_stack([np.ones(40), np.eye(40)[:, :39]]))[0][:, 1:]  # removes the mean
        density = stats.multivariate_normal(np.zeros(39), contrast.T @ cov @ contrast)
        return density.logpdf((contrast.T @ (place - place.mean(0))).T).sum()

    theta = [(7.0, 9e4), (1.0, 2e4), (60.0, 5e5)]
    ours, theirs = (np.array([f(*t) for t in theta]) for f in (fit.log_likelihood, dense))
    np.testing.assert_allclose(np.diff(ours), np.diff(theirs), rtol=1e-8)  # constants drop out


@pytest.mark.parametrize("error_m", [0.0, 20.0])
def test_the_profile_is_the_likelihood_at_its_best_variance(error_m):
    rng = np.random.default_rng(5)
    interval = rng.exponential(2, 59)
    place = track(rng, interval, 7.0, error_m)[["x", "y"]].to_numpy()
    fit = OrnsteinUhlenbeck(interval, place, np.full(60, error_m))
    best = [max(fit.log_likelihood(tau, v) for v in np.geomspace(1e4, 1e6, 4001)) for tau in (2.0, 7.0, 30.0)]
    # the grid of variances is 0.1 % fine and the maximum flat: 60 × 2e-7 off at most
    np.testing.assert_allclose(np.diff([fit.profile(t) for t in (2.0, 7.0, 30.0)]), np.diff(best), atol=1e-4)


def test_a_crossing_time_without_an_upper_limit_is_taken_at_the_cautious_end():
    rng = np.random.default_rng(16)
    own = {f"A{k}": track(rng, np.full(59, 4.0), 40.0, animal=f"A{k}") for k in range(20)}
    fits = {a: OrnsteinUhlenbeck(np.full(59, 4.0), t[["x", "y"]].to_numpy(), np.zeros(60)) for a, t in own.items()}
    times = {a: fit.crossing_time() for a, fit in fits.items()}
    table = autocorrelation_weights(pd.concat(own.values())).table.set_index("animal")["crossing_time_h"]
    open_ended = [a for a, t in times.items() if t.open_ended and t.hours < 200]
    assert 0 < len(open_ended) < 20
    for animal, time in times.items():
        assert table[animal] == pytest.approx(236.0 if animal in open_ended or time.hours > 200 else time.hours)


@pytest.mark.parametrize(("interval_h", "error_m"), [(4.0, 0.0), (4.0, 20.0), (1 / 12, 20.0)])
def test_crossing_time_is_recovered(interval_h, error_m):
    rng = np.random.default_rng(6)
    n, tau = 2000, 10.0
    own = [track(rng, np.full(n, interval_h), tau, error_m, f"A{k}") for k in range(4)]
    table = autocorrelation_weights(pd.concat(own)).table
    # sd of log τ over two axes is about √(τ/T) for dense records, √(2/n)-like for sparse ones; 4 animals, 4 sd
    sd = max(np.sqrt(tau / (n * interval_h)), np.sqrt(2 / n)) / np.sqrt(4)
    assert abs(np.log(table["crossing_time_h"] / tau).mean()) < 4 * sd + 0.5 * tau / (n * interval_h)
    assert (table["crossing_time_lower_h"] < table["crossing_time_h"]).all()


def test_limits_hold_the_crossing_time_as_often_as_they_say():
    rng = np.random.default_rng(8)
    own = [track(rng, rng.exponential(4, 150), 12.0, 15.0, f"A{k:03}") for k in range(40)]
    table = autocorrelation_weights(pd.concat(own)).table
    held = ((table["crossing_time_lower_h"] < 12) & (table["crossing_time_upper_h"] > 12)).sum()
    low, high = stats.binom.interval(0.999, 40, 0.95)
    assert low <= held <= high


def test_ignoring_a_known_error_overstates_the_effective_number():
    rng = np.random.default_rng(9)
    fixes = track(rng, np.full(2000, 1 / 12), 6.0, 20.0)
    with_error = autocorrelation_weights(fixes).effective
    without = autocorrelation_weights(fixes.assign(error_m=0.0)).effective
    truth = 1 + 2000 * np.tanh(1 / 12 / 12)
    assert without > 1.15 * with_error
    assert abs(np.log(with_error / truth)) < abs(np.log(without / truth))


def test_weights_follow_the_order_of_the_fixes_given():
    rng = np.random.default_rng(10)
    fixes = pd.concat([track(rng, rng.exponential(4, 80), 9.0, animal=a) for a in ("A", "B")], ignore_index=True)
    plain = autocorrelation_weights(fixes).weight
    order = rng.permutation(len(fixes))
    np.testing.assert_allclose(autocorrelation_weights(fixes.iloc[order]).weight, plain[order], rtol=1e-12)
    assert ((plain > 0) & (plain <= 1)).all()


def test_the_sentence_says_both_numbers():
    rng = np.random.default_rng(12)
    weights = autocorrelation_weights(track(rng, np.full(1511, 4.0), 12.0))
    assert weights.sentence == (
        f"1,512 fixes carry the information of about {round(weights.effective)} independent ones"
    )
    assert weights.effective == pytest.approx(weights.table["effective"].sum())


def test_a_record_too_short_counts_little_and_is_said():
    rng = np.random.default_rng(13)
    steps = rng.normal(size=(40, 2)).cumsum(axis=0) * 50  # a walk that never turns back
    weights = autocorrelation_weights(frame(np.ones(39), steps, 0.0, "A1"))
    assert weights.effective < 2
    assert any('The record of "A1" (39 h) is too short' in w for w in weights.warnings)


def test_an_animal_that_never_moved_counts_little():
    weights = autocorrelation_weights(frame(np.ones(39), np.zeros((40, 2)), 0.0, "A1"))
    assert weights.effective < 2 and len(weights.warnings) == 1


def test_few_fixes_take_the_crossing_time_of_the_others():
    rng = np.random.default_rng(14)
    own = [track(rng, np.full(n, 4.0), 10.0, animal=a) for a, n in zip("ABCD", (300, 300, 300, 5), strict=True)]
    weights = autocorrelation_weights(pd.concat(own))
    table = weights.table.set_index("animal")
    assert table.loc["D", "crossing_time_h"] == table.loc[["A", "B", "C"], "crossing_time_h"].median()
    assert np.isnan(table.loc["D", "crossing_time_lower_h"])
    assert any("Fewer than 10 fixes to fit a crossing time of D: the median" in w for w in weights.warnings)


def test_few_fixes_and_no_others_count_once_an_animal():
    rng = np.random.default_rng(15)
    weights = autocorrelation_weights(
        pd.concat([track(rng, np.full(4, 4.0), 10.0, animal="A"), track(rng, np.empty(0), 10.0, animal="B")])
    )
    assert weights.table["effective"].tolist() == [1.0, 1.0]
    assert any("each animal counts as one fix" in w for w in weights.warnings)
