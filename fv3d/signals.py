"""Plain time series: dominant frequency, mean and lag, each with an uncertainty."""

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
        A length or speed that is not positive.

    Notes
    -----
    Source: JCGM 100:2008, equation 12.

    Examples
    --------
    >>> st = strouhal_number(Estimate(3.0, 0.03, "given", "Hz"), length=0.1, speed=1.0)
    >>> print(f"{st.value:.2f} {st.std:.3f}")
    0.30 0.003
    """
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
    if np.shape(values) != np.shape(reference):
        raise CaseError("Two records of one length are compared.", where="lag(values, reference)",
                        got=f"{np.shape(values)} and {np.shape(reference)}",
                        remedy="Cut both to the same times.")
    grid = np.arange(len(np.atleast_1d(values)), dtype=float)
    a, b = (_record(grid, v)[1] for v in (values, reference))
    n = len(a)
    size = 1 << (2 * n - 1).bit_length()
    product = np.fft.rfft(a - a.mean(), size) * np.conj(np.fft.rfft(b - b.mean(), size))
    both = np.roll(np.fft.irfft(product, size), n)[1:2 * n]
    i = int(np.argmax(both))
    return step * (i - (n - 1) + _vertex(both, i))


def _record(time: np.ndarray, values: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    time, values = np.asarray(time, dtype=float), np.asarray(values, dtype=float)
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
