"""The envelope mixture, against a reference library and by the properties of EM."""

import math

import numpy as np
import pytest

from ros_echo_perception.core.perception.mixture import fit_mixture, fit_mixture_of_unknown_order

TIME = np.arange(240.0)
NOISE = math.sqrt(0.5)
SIGMA = 8.0
BOUNDS = (0.8 * SIGMA, 1.25 * SIGMA)


def bumps(places, heights, sigma=SIGMA):
    z = (TIME[:, None] - np.array(places)) / sigma
    return np.exp(-0.5 * z * z) @ np.array(heights, float)


def noisy(envelope, seed, correlation=4.0):
    """Envelope of signal plus complex noise of variance 1, as correlated as a matched filter's."""
    rng = np.random.default_rng([5, seed])
    kernel = np.exp(-0.5 * (np.arange(-12, 13) / correlation) ** 2)
    raw = rng.standard_normal((2, TIME.size + 24))
    smooth = [np.convolve(row, kernel / np.linalg.norm(kernel), "valid") for row in raw]
    return np.abs(envelope + (smooth[0] + 1j * smooth[1]) / math.sqrt(2.0))


def independent(correlation=4.0):
    return 1.0 / (2.0 * math.sqrt(math.pi) * correlation)


def log_likelihood(mixture, weight):
    """Of binned data under the stated density, with no background; mean per unit weight."""
    density = mixture.evaluate(TIME) / mixture.area.sum()
    return float(weight @ np.log(density + 1e-300) / weight.sum())


@pytest.mark.parametrize(
    ("means", "shares", "sigma"),
    [((70.0, 150.0), (0.5, 0.5), 9.0), ((60.0, 95.0), (0.7, 0.3), 8.0),
     ((40.0, 110.0, 180.0), (0.2, 0.5, 0.3), 10.0)],
)  # fmt: skip
def test_agrees_with_scikit_learn_on_drawn_samples(means, shares, sigma):
    # Reference library: scikit-learn's GaussianMixture with a covariance tied over components,
    # fitted to the draws themselves; ours sees their histogram only.
    mixture_module = pytest.importorskip("sklearn.mixture")
    rng = np.random.default_rng(11)
    which = rng.choice(len(means), 20000, p=shares)
    drawn = rng.normal(np.array(means)[which], sigma)
    histogram, _ = np.histogram(drawn, np.arange(-0.5, 240.0))
    starts = np.array(means) + np.array([6.0, -5.0, 4.0])[: len(means)]
    reference = mixture_module.GaussianMixture(
        len(means), covariance_type="tied", means_init=starts[:, None], tol=1e-7, max_iter=500
    ).fit(drawn[:, None])
    ours = fit_mixture(TIME, histogram.astype(float), starts, (4.0, 20.0))
    order = np.argsort(reference.means_.ravel())
    np.testing.assert_allclose(ours.time_s, reference.means_.ravel()[order], atol=0.4)
    np.testing.assert_allclose(ours.area / ours.area.sum(), reference.weights_[order], atol=0.01)
    # Sheppard's correction: a bin adds 1/12 of its square to the variance.
    variance = float(reference.covariances_[0, 0]) + 1.0 / 12.0
    assert ours.sigma_s == pytest.approx(math.sqrt(variance), rel=0.01)
    assert ours.area.sum() == pytest.approx(histogram.sum())


def test_exact_bumps_are_found_exactly():
    weight = bumps((80.0, 140.0), (3.0, 1.5))
    found = fit_mixture(TIME, weight, np.array([70.0, 150.0]), BOUNDS)
    np.testing.assert_allclose(found.time_s, [80.0, 140.0], atol=0.05)
    np.testing.assert_allclose(found.heights(), [3.0, 1.5], rtol=0.01)
    assert found.sigma_s == pytest.approx(SIGMA, rel=0.01)
    np.testing.assert_allclose(found.evaluate(TIME), weight, atol=0.03)


def test_more_rounds_never_lower_the_likelihood(monkeypatch):
    # Dempster, Laird and Rubin 1977: EM never decreases the likelihood.
    from ros_echo_perception.core.perception import mixture

    monkeypatch.setattr(mixture, "_TOLERANCE", -1.0)
    weight = noisy(bumps((80.0, 105.0, 170.0), (9.0, 5.0, 6.0)), 1)
    starts = np.array([60.0, 120.0, 200.0])
    values = []
    for rounds in range(1, 40):
        monkeypatch.setattr(mixture, "_MAX_ROUNDS", rounds)
        values.append(mixture.fit_mixture(TIME, weight, starts, (4.0, 30.0)).log_likelihood)
    assert np.all(np.diff(values) > -1e-12)
    assert values[-1] - values[0] > 0.05


def test_no_small_change_of_the_answer_raises_the_likelihood():
    weight = bumps((80.0, 120.0), (5.0, 3.0)) + 1e-3
    best = fit_mixture(TIME, weight, np.array([75.0, 130.0]), (4.0, 20.0))

    def likelihood(time_s, area, sigma_s):
        return log_likelihood(type(best)(time_s, area, sigma_s, 0.0), weight)

    top = likelihood(best.time_s, best.area, best.sigma_s)
    for k in (0, 1):
        for step in (-2.0, 2.0):
            assert (
                likelihood(best.time_s + step * (np.arange(2) == k), best.area, best.sigma_s) < top
            )
    for factor in (0.8, 1.25):
        assert likelihood(best.time_s, best.area, factor * best.sigma_s) < top
        assert likelihood(best.time_s, best.area * np.array([factor, 1.0]), best.sigma_s) < top


def test_starving_components_are_dropped():
    weight = bumps((80.0,), (4.0,))
    found = fit_mixture(TIME, weight, np.array([82.0, 225.0]), BOUNDS)
    assert found.time_s == pytest.approx([80.0], abs=0.1)
    assert found.area.sum() == pytest.approx(weight.sum())


@pytest.mark.parametrize("true_sigma", [2.0, 40.0])
def test_width_stays_within_its_bounds(true_sigma):
    found = fit_mixture(TIME, bumps((120.0,), (4.0,), true_sigma), np.array([118.0]), BOUNDS)
    assert found.sigma_s == pytest.approx(BOUNDS[0] if true_sigma < SIGMA else BOUNDS[1])
    assert found.time_s == pytest.approx([120.0], abs=0.5)


def test_scale_and_shift_of_the_data_carry_over():
    weight = noisy(bumps((80.0, 140.0), (20.0, 12.0)), 3)
    starts = np.array([75.0, 150.0])
    plain = fit_mixture(TIME, weight, starts, BOUNDS)
    # The same in seconds, later, and seven times as strong.
    step, first = 1e-4, 0.0123
    bounds = (BOUNDS[0] * step, BOUNDS[1] * step)
    other = fit_mixture(first + step * TIME, 7.0 * weight, first + step * starts, bounds)
    np.testing.assert_allclose(other.time_s, first + step * plain.time_s, atol=1e-9)
    np.testing.assert_allclose(other.heights(), 7.0 * plain.heights(), rtol=1e-6)
    assert other.sigma_s == pytest.approx(step * plain.sigma_s, rel=1e-6)


@pytest.mark.parametrize(
    ("places", "heights"),
    [((120.0,), (5.0,)), ((120.0,), (30.0,)), ((90.0, 140.0), (15.0, 12.0)),
     ((50.0, 110.0, 180.0), (20.0, 15.0, 25.0))],
)  # fmt: skip
def test_order_is_estimated(places, heights):
    """Amplitudes in noise sigmas: 5 is 14 dB, 15 is 24 dB. Right in at least 9 of 10 draws."""
    right, errors = 0, []
    # The stretch that the chain would cut out: three widths around what stands out.
    part = slice(int(places[0] - 3 * SIGMA), int(places[-1] + 3 * SIGMA))
    for seed in range(20):
        found = fit_mixture_of_unknown_order(
            TIME[part], noisy(bumps(places, heights), seed)[part], NOISE, BOUNDS, independent(), 6
        )
        if found.time_s.size == len(places):
            right += 1
            errors.append(found.time_s - np.array(places))
    assert right >= 18
    # Arrival times scatter about the truth, by less than sigma over amplitude, doubled.
    scatter = np.sqrt(np.mean(np.square(errors), axis=0))
    assert np.all(scatter < 2.0 * SIGMA / np.array(heights) + 0.5)


def test_input_stays_as_it_is():
    weight, starts = bumps((80.0,), (4.0,)), np.array([70.0])
    for array in (weight, starts):
        array.flags.writeable = False
    fit_mixture(TIME, weight, starts, BOUNDS)
    fit_mixture_of_unknown_order(TIME, weight, NOISE, BOUNDS, independent(), 3)
    assert starts[0] == 70.0
