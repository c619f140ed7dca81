"""How noisy a record is, and how far one sample's noise knows its neighbour's."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from darkedge.analysis.captures import FloatArray
from darkedge.analysis.uncertainty import coverage_factor

MAD_TO_SIGMA = 1.482602218505602
"""1 / Phi^-1(3/4): median absolute deviation of normal noise to its standard deviation."""

ENOUGH_FLAT_SAMPLES = 30
"""Below this many flat samples the noise is known to worse than 13 %, 1 / sqrt(2 (n - 1)), and is called unknown."""

ENOUGH_INDEPENDENT = 20.0
"""Independent samples below which slow noise cannot be told from a tail or a drift."""

LONGEST_LAG = 256
"""Lag in samples beyond which no correlation is looked for."""

ENOUGH_TO_CORRELATE = 4096
"""Samples of one flat part that are enough to tell the correlation."""

MOST_DIFFERENCES = 4096
"""Differences of neighbours that are looked at for hiss and codes: enough for a per cent; of a longer record, stretches."""

STRETCHES = 16
"""Stretches, evenly over a long record, in which the differences are taken."""

MOST_POOLED = 24
"""Channels whose stretches at rest are looked at together for the correlation of their noise."""

UNDITHERED = 0.985
"""Share of samples in two codes from which noise does not dither them."""

FEWEST_CODES, MOST_CODES = 8, 65536
"""Reach of a record, in its smallest steps, between which the smallest step is taken for a code."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Noise:
    """Noise of one channel.

    `sigma_V` is the standard deviation of one sample; `correlation` has shape (m,), the autocorrelation at
    lags 0, 1 ... m-1 samples (lag 0 is 1), cut where it drowns in its own scatter; `n_flat` counts the
    samples it rests on.
    """

    sigma_V: float
    correlation: FloatArray
    n_flat: int

    @property
    def known(self) -> bool:
        """Whether the flat parts were long enough to tell."""
        return self.n_flat >= ENOUGH_FLAT_SAMPLES and self.independent >= ENOUGH_INDEPENDENT

    @property
    def widening(self) -> float:
        """By how much intervals are wider because the size of the noise is itself uncertain: Student's factor over the normal one."""
        return coverage_factor(0.95, max(self.independent, 3.0)) / coverage_factor(0.95, math.inf)

    @property
    def independent(self) -> float:
        """How many independent samples tell as much of the size of the noise: n over the sum of squared correlations (Bartlett 1946)."""
        return self.n_flat / (1.0 + 2.0 * float(np.sum(np.square(self.correlation[1:]))))

    def inflation(self, n: int) -> float:
        """Variance of the mean of n neighbouring samples, over that of n independent ones.

        1 + 2 sum (1 - k/n) rho_k, never below 1/n of the variance of one sample (Bartlett 1946).
        """
        lags = np.arange(1, min(self.correlation.size, n))
        rho = self.correlation[1 : lags.size + 1]
        return max(1.0 + 2.0 * float(np.sum((1 - lags / n) * rho)), 1.0 / n)

    def u_mean_V(self, n: int) -> float:
        """Standard uncertainty of the mean of n neighbouring samples, in volts."""
        return self.sigma_V * float(np.sqrt(self.inflation(n) / max(n, 1)))


def difference_sigma(signal_V: FloatArray) -> float:
    """Noise of one sample from the differences of neighbours, which level and drift do not enter.

    Median absolute difference, scaled for normal white noise; where more than half of the differences are
    zero (noise below one code) the root mean square of the small ones. Correlated noise comes out too low:
    use `flat_noise` once the flat parts are known.

    Parameters
    ----------
    signal_V : array, shape (n,), n >= 2, volts.
    """
    return sigma_of_steps(steps_between(signal_V), lambda: float(np.ptp(signal_V)))


def sigma_of_steps(steps: FloatArray, reach_V: Callable[[], float]) -> float:
    """As `difference_sigma`, from the absolute differences themselves; `reach_V` gives the reach of the record where it is needed."""
    sigma = MAD_TO_SIGMA * float(np.median(steps)) / math.sqrt(2)
    if sigma > 0:
        return sigma
    moving = steps[steps > 0]
    code = float(np.min(moving)) if moving.size else 0.0
    if code == 0.0 or code > reach_V() / 16:
        return 0.0
    small = steps[steps <= 2.5 * code]
    return float(np.sqrt(np.mean(small**2) / 2))


def steps_between(signal_V: FloatArray) -> FloatArray:
    """Absolute differences of neighbouring samples; of a long record only in stretches spread evenly over it."""
    if signal_V.size <= MOST_DIFFERENCES + STRETCHES:
        return np.asarray(np.abs(np.diff(signal_V)))
    each = MOST_DIFFERENCES // STRETCHES
    starts = np.linspace(0, signal_V.size - each - 1, STRETCHES).astype(np.intp)
    return np.asarray(np.abs(np.concatenate([np.diff(signal_V[k : k + each + 1]) for k in starts])))


def code_step_V(signal_V: FloatArray, stated_V: float | None = None) -> float:
    """Voltage of one code of the digitiser: as stated, else as seen; 0 where no steps can be seen.

    Steps are seen where every difference of neighbours is a whole multiple of the smallest one.
    """
    if stated_V is not None and stated_V > 0:
        return stated_V
    return code_of_steps(steps_between(signal_V), float(np.min(signal_V)), float(np.max(signal_V)))


def code_of_steps(steps: FloatArray, lowest_V: float, highest_V: float) -> float:
    """As `code_step_V`, from the absolute differences themselves and the ends of the record."""
    reach = highest_V - lowest_V
    steps = steps[steps > 1e-9 * max(float(np.max(steps)), abs(lowest_V), abs(highest_V))]
    if steps.size < 2:
        return 0.0
    step = float(np.min(steps))
    multiples = steps / step
    whole = np.abs(multiples - np.round(multiples)) < 0.02 * np.maximum(1.0, multiples / 50)
    plausible = FEWEST_CODES <= reach / step < MOST_CODES and multiples.size > 20
    return step if plausible and bool(np.mean(whole) > 0.99) else 0.0


def u_quantised_V(sigma_V: float, step_V: float) -> float:
    """Standard uncertainty that codes leave in a level, however many samples are averaged.

    step / sqrt(12) where the noise is below a code, falling as exp(-2 pi^2 (sigma / step)^2) once noise
    dithers it (first harmonic of the sawtooth error; Widrow and Kollar, Quantization Noise, 2008).
    """
    if step_V <= 0:
        return 0.0
    return step_V / math.sqrt(12) * math.exp(-2 * (math.pi * sigma_V / step_V) ** 2)


def u_of_codes(values_V: FloatArray, origin_V: float, sigma_V: float, step_V: float) -> float:
    """Standard uncertainty that codes leave in the level of a state, from the codes that it shows.

    Where two neighbouring codes hold nearly all samples the noise is too small to dither: with a share p of the samples in the more
    frequent one, the level lies somewhere between the border of the two codes and where full dithering would put it, a stretch of
    (p - 1/2) codes, taken as a rectangle. With more codes it is `u_quantised_V` of the noise less that of the codes themselves.

    Parameters
    ----------
    values_V : array, shape (n,), volts
        Samples of the state.
    origin_V : float
        The voltage of any code.
    sigma_V, step_V : float
        Noise of a sample as it shows, and the voltage of a code.

    References
    ----------
    B. Widrow and I. Kollar, Quantization Noise, 2008; Sheppard's correction for the variance of rounded values.
    """
    if step_V <= 0 or values_V.size == 0:
        return u_quantised_V(sigma_V, step_V)
    codes = np.round((values_V - origin_V) / step_V).astype(np.intp)
    counts = np.sort(np.bincount(codes - codes.min()))[::-1]
    if float(np.sum(counts[:2])) >= UNDITHERED * codes.size:
        return step_V * abs(float(counts[0]) / float(np.sum(counts[:2])) - 0.5) / math.sqrt(3) + 0.02 * step_V
    return u_quantised_V(math.sqrt(max(sigma_V**2 - step_V**2 / 12, 0.0)), step_V)


def flat_noise(residuals_V: Sequence[FloatArray], *, fallback_V: float) -> Noise:
    """Noise from what is left of the flat parts once their level is taken off.

    Parameters
    ----------
    residuals_V : sequence of arrays, volts
        One array for each flat part, samples in order.
    fallback_V : float
        Noise of one sample where the flat parts are too short to tell.
    """
    parts = [part - np.mean(part) for part in residuals_V if part.size >= 4]
    n_flat = int(sum(part.size for part in parts))
    if n_flat < 8:
        return Noise(sigma_V=fallback_V, correlation=np.ones(1), n_flat=n_flat)
    sums = np.zeros(LONGEST_LAG)
    counts = np.zeros(LONGEST_LAG)
    for part in parts:
        _add_lagged_products(part, sums, counts)
    variance = float(sum(part @ part for part in parts)) / max(n_flat - len(parts), 1)
    if not variance > 0:
        return Noise(sigma_V=0.0, correlation=np.ones(1), n_flat=n_flat)
    rho = np.divide(sums, np.maximum(counts, 1)) / (sums[0] / counts[0])
    found = Noise(sigma_V=float(np.sqrt(variance)), correlation=_cut(rho, counts), n_flat=n_flat)
    if found.correlation.size == 1:
        return found
    # What the mean of each part took away is put back: it made neighbours look less alike than they are.
    taken = min(found.inflation(n_flat // len(parts)) * len(parts) / n_flat, 0.5)
    rho = (rho + taken) / (1.0 + taken)
    return Noise(
        sigma_V=found.sigma_V * math.sqrt(1.0 + taken - len(parts) / n_flat),
        correlation=_cut(rho, counts),
        n_flat=n_flat,
    )


def pooled(noises: Sequence[Noise], parts_V: Sequence[Sequence[FloatArray]]) -> list[Noise]:
    """Noise of channels that were taken alike: the correlation from all of them together, the size from each.

    Parameters
    ----------
    noises : sequence of Noise
        As each channel told by itself.
    parts_V : sequence
        The stretches at rest of each channel.
    """
    scaled = [
        part / noise.sigma_V
        for noise, parts in zip(noises[:MOST_POOLED], parts_V, strict=False)
        if noise.sigma_V > 0
        for part in parts
    ]
    together = rest_noise(scaled, fallback_V=1.0)
    return [
        Noise(sigma_V=noise.sigma_V, correlation=together.correlation, n_flat=noise.n_flat)
        if noise.sigma_V > 0 and noise.n_flat >= ENOUGH_FLAT_SAMPLES
        else noise
        for noise in noises
    ]


def rest_noise(parts_V: Sequence[FloatArray], *, fallback_V: float) -> Noise:
    """Noise from stretches at rest, looked at closely only where it is not white.

    Noise counts as white where neither its first lags nor the means of blocks of it say otherwise, at three standard deviations.

    Parameters
    ----------
    parts_V : sequence of arrays, volts
        One array for each stretch, samples in order, edges' tails taken off.
    fallback_V : float
        Noise of one sample where the stretches are too short to tell.
    """
    parts = [part - part.mean() for part in parts_V if part.size >= 4]
    n_flat = sum(part.size for part in parts)
    if n_flat < 8:
        return Noise(sigma_V=fallback_V, correlation=np.ones(1), n_flat=n_flat)
    power = float(sum(float(part @ part) for part in parts))
    variance = power / max(n_flat - len(parts), 1)
    if not variance > 0:
        return Noise(sigma_V=0.0, correlation=np.ones(1), n_flat=n_flat)
    if _looks_white(parts, power, n_flat):
        return Noise(sigma_V=math.sqrt(variance), correlation=np.ones(1), n_flat=n_flat)
    return flat_noise(parts, fallback_V=fallback_V)


def _looks_white(parts: Sequence[FloatArray], power: float, n_flat: int) -> bool:
    allowed = 3.0 / math.sqrt(n_flat)
    for lag in (1, 2, 3, 5):
        product = sum(float(part[lag:] @ part[:-lag]) for part in parts if part.size > lag)
        if abs(product / power + 1.0 / n_flat) > allowed:
            return False
    for block in (8, 64):
        means = [part[: part.size // block * block].reshape(-1, block).mean(axis=1) for part in parts]
        count = sum(m.size for m in means)
        if count < 6:
            break
        ratio = sum(float(m @ m) for m in means) * block * n_flat / power / count
        if abs(ratio - 1.0) > 3.5 * math.sqrt(2.0 / count):
            return False
    return True


def _add_lagged_products(part: FloatArray, sums: FloatArray, counts: FloatArray) -> None:
    """Add the lagged products of one flat part; the transform does all lags at once."""
    part = part[:ENOUGH_TO_CORRELATE]
    m = min(LONGEST_LAG, part.size)
    size = 1 << int(part.size + m - 1).bit_length()
    spectrum = np.fft.rfft(part, size)
    sums[:m] += np.fft.irfft(spectrum.real**2 + spectrum.imag**2, size)[:m]
    counts[:m] += part.size - np.arange(m)


def _cut(rho: FloatArray, counts: FloatArray) -> FloatArray:
    """Keep the correlation up to where it first drowns in its own scatter, 1 / sqrt(count)."""
    usable = counts > 0.5 * counts[0]
    drowned = np.flatnonzero((np.abs(rho) < 1 / np.sqrt(np.maximum(counts, 1))) | ~usable)
    end = int(drowned[0]) if drowned.size else rho.size
    return np.ascontiguousarray(rho[: max(end, 1)])
