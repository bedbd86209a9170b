"""Frequencies, means and lags against formulas and Monte Carlo."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

import fv3d
from fv3d import signals
from fv3d.errors import CaseError


def tone(n: int, step: float, frequency: float, noise: float, seed: int) -> tuple[np.ndarray, ...]:
    rng = np.random.default_rng(seed)
    t = step * np.arange(n)
    phase = rng.uniform(0, 2 * np.pi)
    return t, np.cos(2 * np.pi * frequency * t + phase) + noise * rng.standard_normal(n) + 3.0


def test_a_clean_tone_is_found_to_rounding() -> None:
    t = 0.01 * np.arange(777)
    found = signals.dominant_frequency(t, 2.0 + 0.1 * t + np.sin(2 * np.pi * 1.2345 * t))
    assert abs(found.value - 1.2345) < 1e-9


def test_frequency_reaches_the_bound_and_its_uncertainty_covers() -> None:
    """Bound of a real tone in white noise, Rife and Boorstyn (1974): 1.654e-3 Hz here."""
    n, step, noise = 200, 0.05, 0.3
    bound = np.sqrt(6) / np.pi * noise / (n * step * np.sqrt(n))
    assert bound == pytest.approx(1.6540e-3, rel=1e-4)
    found = [signals.dominant_frequency(*tone(n, step, 1.13, noise, s)) for s in range(300)]
    error = np.array([f.value for f in found]) - 1.13
    assert np.sqrt(np.mean(error ** 2)) <= 1.3 * bound
    covered = np.mean(np.abs(error) <= 1.96 * np.array([f.std for f in found]))
    assert 0.93 <= covered


def test_jitter_of_the_cycles_counts() -> None:
    """Periods with 3 % scatter: the mean frequency over n cycles scatters by 3 % / sqrt(n)."""
    rng = np.random.default_rng(4)
    values, stds = [], []
    for _ in range(60):
        edges = np.concatenate([[0.0], np.cumsum(1.0 + 0.03 * rng.standard_normal(40))])
        t = np.arange(0.0, edges[-2], 0.02)
        found = signals.dominant_frequency(t, np.sin(2 * np.pi * np.interp(t, edges, range(41))))
        values.append(found.value)
        stds.append(found.std)
    assert np.std(values) <= 2.0 * np.mean(stds)
    assert np.mean(stds) >= 0.5 * 0.03 / np.sqrt(39)


def test_mean_of_a_correlated_record() -> None:
    """Markov process with correlation a: var(mean) = (1 + a) / (1 - a) / n (textbook)."""
    rng = np.random.default_rng(2)
    n, a = 4000, 0.9
    noise = rng.standard_normal((200, n)) * np.sqrt(1 - a * a)
    x = np.zeros((200, n))
    x[:, 0] = rng.standard_normal(200)
    for k in range(1, n):
        x[:, k] = a * x[:, k - 1] + noise[:, k]
    found = [signals.mean_value(row) for row in x]
    expected = np.sqrt((1 + a) / (1 - a) / n)
    assert np.mean([f.std for f in found]) == pytest.approx(expected, rel=0.1)
    assert np.std([f.value for f in found]) == pytest.approx(expected, rel=0.15)


def test_strouhal_number_adds_relative_uncertainties() -> None:
    st = signals.strouhal_number(signals.Estimate(13.0, 0.13, "given", "Hz"), length=0.01,
                                 speed=1.0, length_std=1e-4, speed_std=0.02)
    assert st.value == pytest.approx(0.13)
    assert st.std == pytest.approx(0.13 * np.sqrt(0.01 ** 2 + 0.01 ** 2 + 0.02 ** 2))


def test_lag_of_a_shifted_record() -> None:
    t = 0.01 * np.arange(1000)
    a, b = np.sin(2 * np.pi * (t - 0.137)) * np.hanning(1000), np.sin(2 * np.pi * t)
    assert signals.lag(a, b, step=0.01) == pytest.approx(0.137, abs=0.003)


def test_phase_reaches_the_bound_and_its_uncertainty_covers() -> None:
    """Variance 2 (sigma / A)^2 / n of each phase, Rife and Boorstyn (1974)."""
    rng, n, step, noise = np.random.default_rng(3), 400, 0.05, 0.3
    t = step * np.arange(n)
    found = []
    for _ in range(300):
        begin = rng.uniform(0, 6.0)
        a, b = (size * np.cos(2 * np.pi * 1.13 * t + begin - behind)
                + noise * rng.standard_normal(n) for size, behind in ((2.0, 0.7), (1.0, 0.0)))
        found.append(signals.phase(a, b, step=step, frequency=1.13))
    error = np.array([f.value for f in found]) - 0.7
    bound = noise * np.sqrt(2 / n * (1 + 0.25))
    assert np.sqrt(np.mean(error ** 2)) <= 1.3 * bound
    assert 0.93 <= np.mean(np.abs(error) <= 1.96 * np.array([f.std for f in found]))
    clean = signals.phase(np.cos(6 * t - 3.0), 1.0 + np.cos(6 * t), step=step,
                          frequency=6 / (2 * np.pi))
    assert clean.value == pytest.approx(3.0, abs=1e-9) and clean.unit == "rad"


def test_phase_and_lag_agree() -> None:
    t = 0.01 * np.arange(1000)
    a, b = np.sin(2 * np.pi * (t - 0.137)), np.sin(2 * np.pi * t)
    found = signals.phase(a, b, step=0.01, frequency=1.0)
    assert found.value / (2 * np.pi) == pytest.approx(signals.lag(a, b, step=0.01), abs=0.003)
    with pytest.raises(CaseError, match="two cycles"):
        signals.phase(a, b, step=0.01, frequency=0.1)
    with pytest.raises(CaseError, match="one length"):
        signals.phase(a, b[1:], step=0.01, frequency=1.0)


START_UPS = {
    "mean decays": lambda t: 3.0 * np.exp(-t / 2.0) + np.sin(2 * np.pi * t),
    "oscillation grows": lambda t: np.sin(2 * np.pi * t) / (1.0 + 99.0 * np.exp(-t)),
    "jump": lambda t: np.where(t < 8.0, 2.0, 1.0) + 0.2 * np.sin(2 * np.pi * t)}


@pytest.mark.parametrize("make", START_UPS.values(), ids=START_UPS)
def test_start_ups_are_cut_off(make: Callable[[np.ndarray], np.ndarray]) -> None:
    """What is left differs little from the end; not much more than needed is cut."""
    t = 0.02 * np.arange(3000)
    values = make(t) + 0.02 * np.random.default_rng(0).standard_normal(len(t))
    begin = signals.settling_time(t, values)
    rest, end = values[t >= begin], values[t >= 40.0]
    assert 5.0 <= begin <= 20.0
    assert abs(rest.mean() - end.mean()) <= 0.03 * end.std()
    assert rest.std() == pytest.approx(end.std(), rel=0.03)


def test_a_settled_record_is_kept_and_a_drifting_one_refused() -> None:
    t = 0.02 * np.arange(3000)
    noise = np.random.default_rng(1).standard_normal(len(t))
    assert signals.settling_time(t, np.sin(6 * t)) == 0.0
    assert signals.settling_time(t, np.sin(6 * t) + 0.3 * noise) <= 6.0
    assert signals.settling_time(t, np.full(len(t), 2.0)) == 0.0
    assert signals.settling_time(t, 1.0 + np.exp(-2 * t)) <= 5.0
    for values in (t + np.sin(6 * t), t * np.sin(6 * t), np.exp(-t / 40.0) + 1e-3 * noise):
        with pytest.raises(CaseError, match="not settled"):
            signals.settling_time(t, values)


@pytest.mark.parametrize("time, values", [
    (np.arange(10.0), np.ones(10)), (np.arange(40.0), np.ones(39)),
    (np.full(40, np.nan), np.ones(40)), (np.arange(40.0) ** 2, np.sin(np.arange(40.0))),
    (np.arange(40.0), np.where(np.arange(40) == 3, np.inf, 0.0)),
    (0.01 * np.arange(40.0), np.sin(0.01 * np.arange(40.0)))])
def test_bad_records_are_refused(time: np.ndarray, values: np.ndarray) -> None:
    with pytest.raises(CaseError) as caught:
        fv3d.dominant_frequency(time, values)
    assert caught.value.remedy and caught.value.where
