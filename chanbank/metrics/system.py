"""Both banks as one system: distortion, alias transfers and the D impulse responses.

The pair maps x to x^[t] = sum_r c[(t + Delta) mod D, r] exp(2j pi offset r) x[t - r M], the
delay Delta taken out: a filter that changes from sample to sample with period D, with taps only at
multiples of M. A tone at f spacings from a channel's centre comes out as the tone itself times
K_tau(f) = sum_r c[tau, r] exp(-2j pi f r), and the mean of K over tau is the distortion T_0, its
other Fourier coefficients are the alias transfers T_l.
"""

import numpy as np
import scipy.fft
import scipy.linalg

from chanbank.metrics._spectrum import Curve

__all__ = ["SystemResponse"]

# Points over one channel spacing at least, and points per lag.
_LEAST_GRID, _PER_LAG = 256, 16
_BLOCK = 1 << 20


class SystemResponse:
    """The analysis-synthesis pair seen from its input to its output.

    Attributes
    ----------
    lags : numpy.ndarray
        The integers r, shape (R,); a lag of r is r M samples, the pair's delay taken out.
    impulse_responses : numpy.ndarray
        c[tau, r], float64, shape (D, R): output sample t uses row (t + pair_delay) mod D. A pair
        that reconstructs has 1 at r = 0 and 0 elsewhere. With a fractional offset, tap r also
        turns by exp(2j pi offset r).
    pair_delay : int
        Delta in samples.
    frequencies : numpy.ndarray
        Grid over one channel spacing from a channel's centre, 0 <= f < 1 (all transfers have that
        period), shape (F,).
    distortion : numpy.ndarray
        T_0 on the grid, complex128.
    alias_sum : numpy.ndarray
        Sum over l != 0 of abs(T_l)^2 on the grid.
    alias_peak : numpy.ndarray
        Largest abs(T_l)^2, l != 0, on the grid.
    error : numpy.ndarray
        Error power over signal power for a tone, abs(T_0 - 1)^2 + alias_sum, on the grid.
    group_delay : numpy.ndarray
        Of T_0 in samples, the pair's delay included.

    References
    ----------
    P. P. Vaidyanathan, Multirate Systems and Filter Banks, 1993, ch. 5 (distortion and alias
    transfers); R. E. Crochiere and L. R. Rabiner, Multirate Digital Signal Processing, 1983, ch. 3
    (periodically time-varying systems).

    Examples
    --------
    >>> from chanbank import ChannelPlan, Prototype, bank_report, boxcar_prototype
    >>> g = Prototype([1.0] * 7 + [0.9], 8, pair_delay=7)
    >>> system = bank_report(ChannelPlan(8.0, 8, 8), boxcar_prototype(8), g).system
    >>> system.impulse_responses.ravel().round(3).tolist()
    [1.0, 1.0, 1.0, 1.0, 1.0, 1.0, 1.0, 0.9]
    >>> abs(system.distortion[0]).round(4), system.alias_sum[0].round(6)
    (np.float64(0.9875), np.float64(0.001094))
    """

    def __init__(self, channels, lags, responses, pair_delay):
        self.channels, self.pair_delay = channels, pair_delay
        self.lags = np.asarray(lags, np.int64)
        self.impulse_responses = np.array(responses, np.float64)
        self.hop = len(self.impulse_responses)
        unit = (self.lags == 0).astype(float)
        residual = self.impulse_responses - unit
        self._mean = self.impulse_responses.mean(axis=0)
        self._mean_residual = residual.mean(axis=0)
        varying = residual - self._mean_residual
        # mean over tau of abs(V u)^2 = abs(R u)^2 / D with the triangle R of V: a sum of squares.
        self._triangle = _triangle(varying)
        self._error_triangle = _triangle(residual)
        self._residual, self._varying = residual, varying
        self._per_order = None
        self._grid()

    def _grid(self):
        count = max(_LEAST_GRID, _PER_LAG * len(self.lags))
        self.frequencies = np.arange(count) / count
        self.distortion = self.transfer(self.frequencies)
        self.alias_sum = self.alias_power(self.frequencies)
        self.error = self.error_power(self.frequencies)
        self.alias_peak = self._peaks(self.frequencies)
        self.group_delay = self.delay(self.frequencies)
        for array in vars(self).values():
            if isinstance(array, np.ndarray):
                array.flags.writeable = False

    def _turns(self, frequencies):
        return np.exp(-2j * np.pi * np.mod(np.outer(self.lags, frequencies), 1.0))

    def transfer(self, frequencies):
        """T_0 at any frequencies (spacings from a channel's centre), complex128."""
        return self._mean @ self._turns(np.asarray(frequencies, float))

    def alias_power(self, frequencies):
        """Sum over l != 0 of abs(T_l)^2 at any frequencies."""
        seen = self._triangle @ self._turns(np.asarray(frequencies, float))
        return (np.abs(seen) ** 2).sum(axis=0) / self.hop

    def error_power(self, frequencies):
        """Error power over signal power for a tone at any frequencies."""
        seen = self._error_triangle @ self._turns(np.asarray(frequencies, float))
        return (np.abs(seen) ** 2).sum(axis=0) / self.hop

    def delay(self, frequencies):
        """Group delay of T_0 in samples at any frequencies, `pair_delay` included."""
        turns = self._turns(np.asarray(frequencies, float))
        whole = self._mean @ turns
        ramp = (self._mean * self.lags) @ turns
        with np.errstate(divide="ignore", invalid="ignore"):
            return self.pair_delay + self.channels * (ramp / whole).real

    def responses(self, frequencies):
        """K_tau at any frequencies: what a tone is multiplied by at each of the D phases.

        Returns
        -------
        numpy.ndarray
            complex128, shape (D, len(frequencies)); output sample t has row
            (t + pair_delay) mod D.
        """
        return self.impulse_responses @ self._turns(np.asarray(frequencies, float))

    def white_error(self):
        """Error power over signal power for white input."""
        return float((self._residual**2).sum() / self.hop)

    def spread(self):
        """Spread of the D impulse responses: mean over tau of their squared distance from the
        mean response, over the mean response's energy."""
        return float((self._varying**2).sum() / self.hop / (self._mean**2).sum())

    def distortion_extremes(self):
        """Smallest and largest abs(T_0)^2 over frequency."""
        # A zero of T_0 is met to the last digit: 26 rounds of four.
        curve = Curve(lambda f: np.abs(self.transfer(f)) ** 2, self._step, rounds=26)
        return curve.minimum(0.0, 0.5)[1], curve.maximum(0.0, 0.5)[1]

    def delay_extremes(self):
        """Smallest and largest group delay of T_0 in samples over frequency."""
        curve = Curve(self.delay, self._step)
        return curve.minimum(0.0, 0.5)[1], curve.maximum(0.0, 0.5)[1]

    def worst_error(self):
        """Largest error power for a tone over frequency."""
        return Curve(self.error_power, self._step).maximum(0.0, 0.5)[1]

    def worst_alias_sum(self):
        """Largest sum of abs(T_l)^2, l != 0, over frequency."""
        return Curve(self.alias_power, self._step).maximum(0.0, 0.5)[1]

    def worst_alias(self):
        """Largest abs(T_l)^2 over frequency and over l != 0."""
        if self.hop == 1:
            return 0.0
        rows = self._orders()
        # abs(T_l) never exceeds the sum of its coefficients' magnitudes: most rows drop out.
        bound = np.abs(rows).sum(axis=1) ** 2
        best = 0.0
        for row in np.argsort(bound)[::-1]:
            if bound[row] <= best:
                break
            curve = Curve(lambda f, row=row: np.abs(rows[row] @ self._turns(f)) ** 2, self._step)
            best = max(best, curve.maximum(0.0, 1.0)[1])
        return best

    @property
    def _step(self):
        return 1.0 / max(64, _PER_LAG * len(self.lags))

    def _orders(self):
        """T_l as polynomials in the lags, rows l = 1..D/2 (the others mirror them)."""
        if self._per_order is None:
            spectrum = scipy.fft.rfft(self._varying, axis=0) / self.hop
            self._per_order = spectrum[1:]
        return self._per_order

    def _peaks(self, frequencies):
        """Largest abs(T_l)^2 over all l != 0; orders l and -l swap f and -f."""
        peak = np.zeros(len(frequencies))
        if self.hop == 1:
            return peak
        rows, turns = self._orders(), self._turns(frequencies)
        step = max(1, _BLOCK // len(frequencies))
        for first in range(0, len(rows), step):
            seen = rows[first : first + step] @ turns
            np.maximum(peak, (seen.real**2 + seen.imag**2).max(axis=0), out=peak)
        mirrored = np.roll(peak[::-1], 1)
        return np.maximum(peak, mirrored)


def _triangle(table):
    if len(table) <= table.shape[1]:
        return table
    return scipy.linalg.qr(table, mode="r", check_finite=False)[0][: table.shape[1]]
