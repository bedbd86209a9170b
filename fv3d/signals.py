"""Plain time series: start-up, dominant frequency, mean, phase and lag, with uncertainties."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from .errors import CaseError


@dataclass(frozen=True)
class Estimate:
    """A number with one standard deviation and where that comes from."""

    value: float
    std: float
    basis: str
    unit: str = ""

    def __str__(self) -> str:
        return f"{self.value:.6g} ± {self.std:.2g} {self.unit}".rstrip() + f" ({self.basis})"


def dominant_frequency(time: np.ndarray, values: np.ndarray) -> Estimate:
    """Frequency of the strongest oscillation in a record.

    A sinusoid with mean and trend is fitted by least squares, started from the largest peak of
    the Hann-windowed spectrum.  The uncertainty is the largest of the Cramer-Rao bound of a tone
    in white noise, the scatter of the cycles over the square root of their number, and half the
    difference between the two halves of the record.

    Parameters
    ----------
    time : (n,) [s]
        Evenly spaced.
    values : (n,)

    Returns
    -------
    Estimate
        Frequency [Hz], one standard deviation.

    Raises
    ------
    CaseError
        Fewer than 16 samples, uneven spacing, values that are not finite, or no two whole cycles.

    Notes
    -----
    Sources: Rife, D. C. and Boorstyn, R. R. (1974), IEEE Trans. Inf. Theory 20, 591-598, in the
    form for a real tone: std = (sqrt 6 / pi) (sigma / A) / (record length * sqrt n).
    """
    time, values = _record(time, values)
    n, step = len(time), (time[-1] - time[0]) / (len(time) - 1)
    frequency = _fit(time, values, _peak(values, step))
    length = n * step
    if not frequency * length >= 2.0:
        raise CaseError("The record holds no two cycles of an oscillation.",
                        where="dominant_frequency(time, values)",
                        got=f"{frequency * length:.2g} cycles in {length:.4g} s",
                        remedy="Record longer, or cut the start-up off less.")
    amplitude, noise = _tone(time, values, frequency)
    bound = np.sqrt(6.0) / np.pi * noise / max(amplitude, 1e-300) / (length * np.sqrt(n))
    spread = {"Cramer-Rao bound": bound}
    periods = np.diff(_rises(time, values))
    if len(periods) >= 3:
        spread["scatter of the cycles"] = frequency * periods.std(ddof=1) / periods.mean() \
            / np.sqrt(len(periods))
    half = n // 2
    if frequency * half * step >= 3.0:
        first = _fit(time[:half], values[:half], frequency)
        last = _fit(time[half:], values[half:], frequency)
        spread["drift between the halves"] = 0.5 * abs(first - last)
    basis = max(spread, key=lambda key: spread[key])
    return Estimate(float(frequency), float(spread[basis]), basis, "Hz")


def mean_value(values: np.ndarray) -> Estimate:
    """Mean of a record with an uncertainty that respects correlation between samples.

    The variance of the mean is that of independent samples times the integral of the
    autocorrelation up to its first zero.

    Raises
    ------
    CaseError
        Fewer than 16 samples or values that are not finite.

    Notes
    -----
    Source: Bayley, G. V. and Hammersley, J. M. (1946), J. R. Stat. Soc. Suppl. 8, 184-197.
    """
    _, values = _record(np.arange(len(np.atleast_1d(values)), dtype=float), values)
    n = len(values)
    rest = values - values.mean()
    size = 1 << (2 * n - 1).bit_length()
    spectrum = np.abs(np.fft.rfft(rest, size)) ** 2
    correlation = np.fft.irfft(spectrum, size)[:n] / np.arange(n, 0, -1)
    if correlation[0] <= 0.0:
        return Estimate(float(values.mean()), 0.0, "constant record")
    correlation /= correlation[0]
    zero = int(np.argmax(correlation <= 0.0)) or n
    time = max(1.0 + 2.0 * float(correlation[1:zero].sum()), 1.0)
    return Estimate(float(values.mean()), float(values.std() * np.sqrt(time / n)),
                    f"{n / time:.0f} independent samples")


def strouhal_number(frequency: Estimate, *, length: float, speed: float, length_std: float = 0.0,
                    speed_std: float = 0.0) -> Estimate:
    """Strouhal number ``f L / U`` with its uncertainty.

    Relative uncertainties of frequency, length and speed are added in quadrature.

    Parameters
    ----------
    frequency : Estimate [Hz]
    length, length_std : float [m]
    speed, speed_std : float [m/s]

    Raises
    ------
    CaseError
        A frequency that is no :class:`Estimate`, a length or speed that is not positive.

    Notes
    -----
    Source: JCGM 100:2008, equation 12.

    Examples
    --------
    >>> st = strouhal_number(Estimate(3.0, 0.03, "given", "Hz"), length=0.1, speed=1.0)
    >>> print(f"{st.value:.2f} {st.std:.3f}")
    0.30 0.003
    """
    if not isinstance(frequency, Estimate):
        raise CaseError("The frequency must be an estimate.", where="strouhal_number(frequency)",
                        got=repr(frequency)[:60],
                        remedy="Give what dominant_frequency(...) returned, or "
                               "Estimate(3.0, 0.03, 'given', 'Hz').")
    if not (length > 0 and speed > 0):
        raise CaseError("Length and speed must be positive.", where="strouhal_number(...)",
                        got=f"length {length}, speed {speed}", remedy="Give them in m and m/s.")
    value = frequency.value * length / speed
    relative = np.sqrt((frequency.std / max(frequency.value, 1e-300)) ** 2
                       + (length_std / length) ** 2 + (speed_std / speed) ** 2)
    return Estimate(float(value), float(value * relative), f"frequency: {frequency.basis}")


def lag(values: np.ndarray, reference: np.ndarray, *, step: float) -> float:
    """Time by which ``values`` runs behind ``reference`` [s], by the peak of their correlation.

    The peak is found to a fraction of a step by a parabola.

    Parameters
    ----------
    values, reference : (n,)
    step : float [s]

    Raises
    ------
    CaseError
        Different lengths, or a record as in :func:`mean_value`.
    """
    a, b = _pair(values, reference, "lag(values, reference)")
    n = len(a)
    size = 1 << (2 * n - 1).bit_length()
    product = np.fft.rfft(a - a.mean(), size) * np.conj(np.fft.rfft(b - b.mean(), size))
    both = np.roll(np.fft.irfft(product, size), n)[1:2 * n]
    i = int(np.argmax(both))
    return step * (i - (n - 1) + _vertex(both, i))


def phase(values: np.ndarray, reference: np.ndarray, *, step: float,
          frequency: float) -> Estimate:
    """Phase by which ``values`` runs behind ``reference`` at a frequency [rad].

    Sinusoids of that frequency, with mean and trend, are fitted to both records.  The uncertainty
    is the larger of the Cramer-Rao bound (both records in white noise) and half the difference
    between the halves of the records.

    Parameters
    ----------
    values, reference : (n,)
    step : float [s]
    frequency : float [Hz]

    Returns
    -------
    Estimate
        Between minus pi and pi.

    Raises
    ------
    CaseError
        Different lengths, records as in :func:`mean_value`, or fewer than two cycles in them.

    Notes
    -----
    The phase of a tone of known frequency has the variance ``2 sigma^2 / (A^2 n)``: Rife, D. C.
    and Boorstyn, R. R. (1974), IEEE Trans. Inf. Theory 20, 591-598.
    """
    a, b = _pair(values, reference, "phase(values, reference)")
    n = len(a)
    time = step * np.arange(n)
    if not frequency * n * step >= 2.0:
        raise CaseError("The records hold no two cycles of that frequency.",
                        where="phase(frequency=)", got=f"{frequency * n * step:.2g} cycles",
                        remedy="Record longer, or check frequency and step.")
    behind = _behind(time, a, b, frequency)
    bound = np.sqrt(2.0 / n * sum((noise / max(size, 1e-300)) ** 2
                                  for size, noise in (_tone(time, v, frequency) for v in (a, b))))
    spread = {"Cramer-Rao bound": float(bound)}
    half = n // 2
    if frequency * half * step >= 2.0:
        halves = [_behind(time[part], a[part], b[part], frequency)
                  for part in (slice(half), slice(half, n))]
        drift = (halves[0] - halves[1] + np.pi) % (2 * np.pi) - np.pi
        spread["drift between the halves"] = 0.5 * abs(drift)
    basis = max(spread, key=lambda key: spread[key])
    return Estimate(behind, float(spread[basis]), basis, "rad")


def settling_time(time: np.ndarray, values: np.ndarray) -> float:
    """Time from which mean and strength of a record's fluctuations are those of its end [s].

    Both are averaged over one period of the strongest oscillation of the last half.  Settled is
    the record from where they stay within one and a half times their largest deviation in the last
    half (or 2 % and 5 %, if that is more; common practice, no source).

    Parameters
    ----------
    time : (n,) [s]
        Evenly spaced.
    values : (n,)

    Raises
    ------
    CaseError
        The record has not settled in its first half; records as in :func:`dominant_frequency`.
    """
    time, values = _record(time, values)
    n, step = len(time), (time[-1] - time[0]) / (len(time) - 1)
    half = n // 2
    if np.ptp(values[half:]) <= 1e-12 * np.abs(values).max():
        window = 1
    else:
        window = int(np.clip(round(1.0 / (_peak(values[half:], step) * step)), 1, half // 3))
    level = _moving(values, window)
    power = np.maximum(_moving(values ** 2, window) - level ** 2, 0.0)
    scale = max(np.sqrt(power[-half:].mean()), 0.01 * abs(level[-half:].mean()))
    away = np.zeros(len(level), dtype=bool)
    for local, least in ((level, 0.02 * scale), (power, 0.05 * scale ** 2)):
        end, third, last = local[-half:], local[-half:-half // 2], local[-half // 2:]
        band = max(1.5 * float(np.abs(end - end.mean()).max()), least)
        away |= np.abs(local - end.mean()) > band
        if abs(third.mean() - last.mean()) > 5.0 * least:
            away[:] = True
    settled = int(np.flatnonzero(away)[-1]) + 1 if away.any() else 0
    if settled > n - half:
        raise CaseError("The record has not settled in its first half.", where="settling_time",
                        got=f"{time[-1] - time[0]:.4g} s", remedy="Run longer.")
    return float(time[settled])


def _moving(values: np.ndarray, window: int) -> np.ndarray:
    """(n - window + 1,) means over ``window`` samples, each from its first sample on."""
    return np.lib.stride_tricks.sliding_window_view(values, window).mean(axis=1)


def _behind(time: np.ndarray, a: np.ndarray, b: np.ndarray, frequency: float) -> float:
    angles = []
    for values in (a, b):
        cosine, sine, *_ = np.linalg.lstsq(_design(time, frequency), values, rcond=None)[0]
        angles.append(np.arctan2(sine, cosine))
    return float((angles[0] - angles[1] + np.pi) % (2 * np.pi) - np.pi)


def _pair(values: np.ndarray, reference: np.ndarray, where: str) -> tuple[np.ndarray, np.ndarray]:
    if np.shape(values) != np.shape(reference):
        raise CaseError("Two records of one length are compared.", where=where,
                        got=f"{np.shape(values)} and {np.shape(reference)}",
                        remedy="Cut both to the same times.")
    grid = np.arange(len(np.atleast_1d(values)), dtype=float)
    return _record(grid, values)[1], _record(grid, reference)[1]


def _record(time: np.ndarray, values: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    try:
        time, values = np.asarray(time, dtype=float), np.asarray(values, dtype=float)
    except (TypeError, ValueError):
        raise CaseError("A record is made of numbers.", where="signals", got=repr(values)[:60],
                        remedy="Pass one component at one point.") from None
    if time.ndim != 1 or time.shape != values.shape or len(time) < 16:
        raise CaseError("A record is two columns of one length, 16 samples at least.",
                        where="signals", got=f"shapes {time.shape} and {values.shape}",
                        remedy="Pass one component at one point.")
    if not (np.all(np.isfinite(time)) and np.all(np.isfinite(values))):
        raise CaseError("A record holds values that are not finite.", where="signals",
                        got=f"{int(np.count_nonzero(~np.isfinite(values)))} of {len(values)}",
                        remedy="Iterations are no time: use the record of a transient run.")
    steps = np.diff(time)
    if not (steps.min() > 0 and np.ptp(steps) <= 1e-3 * steps.mean()):
        raise CaseError("The samples are not evenly spaced in time.", where="signals",
                        got=f"steps {steps.min():.4g} to {steps.max():.4g} s",
                        remedy="Interpolate to even steps first.")
    return time, values


def _vertex(y: np.ndarray, i: int) -> float:
    """Offset of a parabola's vertex through three points about ``i``."""
    if not 0 < i < len(y) - 1:
        return 0.0
    bend = y[i - 1] - 2 * y[i] + y[i + 1]
    return float(0.5 * (y[i - 1] - y[i + 1]) / bend) if bend != 0 else 0.0


def _peak(values: np.ndarray, step: float) -> float:
    n = len(values)
    trend = np.polynomial.Polynomial.fit(np.arange(n), values, 1)(np.arange(n))
    size = 8 * n
    power = np.abs(np.fft.rfft((values - trend) * np.hanning(n), size))
    i = int(np.argmax(power[8:])) + 8
    return float((i + _vertex(np.log(power + 1e-300), i)) / (size * step))


def _design(time: np.ndarray, frequency: float) -> np.ndarray:
    t = time - time.mean()
    phase = 2 * np.pi * frequency * t
    return np.column_stack([np.cos(phase), np.sin(phase), np.ones_like(t), t])


def _fit(time: np.ndarray, values: np.ndarray, start: float) -> float:
    """Frequency of the best sinusoid near ``start``: Gauss-Newton on the frequency."""
    frequency, t = start, time - time.mean()
    width = 1.0 / (time[-1] - time[0])
    for _ in range(30):
        design = _design(time, frequency)
        a, b, *_ = np.linalg.lstsq(design, values, rcond=None)[0]
        phase = 2 * np.pi * frequency * t
        slope = 2 * np.pi * t * (b * np.cos(phase) - a * np.sin(phase))
        whole = np.column_stack([design, slope])
        step = float(np.linalg.lstsq(whole, values, rcond=None)[0][-1])
        step = float(np.clip(step, -0.3 * width, 0.3 * width))
        frequency += step
        if abs(step) < 1e-12 * abs(frequency):
            break
    return frequency if abs(frequency - start) < width else start


def _tone(time: np.ndarray, values: np.ndarray, frequency: float) -> tuple[float, float]:
    design = _design(time, frequency)
    weights = np.linalg.lstsq(design, values, rcond=None)[0]
    rest = values - design @ weights
    return float(np.hypot(weights[0], weights[1])), float(rest.std(ddof=5))


def _rises(time: np.ndarray, values: np.ndarray) -> np.ndarray:
    """Times at which a record rises through its mean; ripples below a tenth do not count."""
    rest = values - values.mean()
    limit, armed, times = 0.1 * np.abs(rest).max(), False, []
    for i in range(1, len(rest)):
        armed = armed or rest[i - 1] < -limit
        if armed and rest[i - 1] < 0.0 <= rest[i]:
            share = rest[i - 1] / (rest[i - 1] - rest[i])
            times.append(time[i - 1] + share * (time[i] - time[i - 1]))
            armed = False
    return np.array(times)
