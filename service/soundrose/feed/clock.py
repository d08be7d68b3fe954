"""core: the sample clock against the times in the messages, and against the host: drift, jumps, how sure `t` is.

A point is taken for each second of samples: how far the block times of that second are ahead of the count at the
nominal rate, by the median (against the host by the least, because receipt is only ever late). The drift is the median
of the slopes between each point of the older half and its counterpart in the newer half (Theil 1950, the "incomplete
method"; Sen 1968), so that up to a quarter of the points may be anything. Its spread comes from the median absolute
deviation of the points from the line, times 1.4826 as for a Gaussian law (Huber 1981, Robust Statistics, ch. 5), and
the variance of that estimate for evenly spaced points with independent errors: pi/2 times that of the mean of the
slopes. Before LEAST_S nothing is said.

Positive: the sample clock is slow, a sample takes longer than the nominal rate says.
"""

from statistics import median
from typing import Any, Final

import numpy as np

__all__ = ["LEAST_S", "WINDOW_S", "SampleClock", "Trend"]

WINDOW_S: Final = 1200  #: seconds looked back on: long enough for 0.01 ppm, short enough to follow the temperature
LEAST_S: Final = 10
SCATTER_S: Final = 60  #: seconds whose scatter is kept
STEP_MS: Final = 5.0  #: a point this far off the line, and the next one too, is a jump
STEP_SIGMAS: Final = 8.0  #: and this many spreads of a point
NOT_REAL_PPM: Final = 1000.0  #: against the host: a recording at another speed has no drift to speak of
_GAUSS: Final = 1.4826


class Trend:
    """A robust line through points, one a second.

    jumps : times the line was begun anew because the points had left it.
    """

    def __init__(self) -> None:
        self._x: list[float] = []
        self._y: list[float] = []
        self._off: tuple[float, float] | None = None
        self._fit: tuple[float, float, float] | None = None  # slope, offset at the mean x, sigma of a point
        self.jumps = 0

    def begin(self) -> None:
        """Forget all points: what comes has nothing to do with them."""
        self._x.clear()
        self._y.clear()
        self._off = self._fit = None

    def push(self, x_s: float, ahead_s: float) -> None:
        """A point: `ahead_s` at nominal time `x_s`, which rises."""
        if self._fit is not None and self._is_off(x_s, ahead_s):
            if self._off is None:
                self._off = x_s, ahead_s
                return
            self.jumps += 1
            before = self._off
            self.begin()
            self._keep(*before)
        self._off = None
        self._keep(x_s, ahead_s)
        self._fit = self._fitted()

    def _keep(self, x_s: float, ahead_s: float) -> None:
        self._x.append(x_s)
        self._y.append(ahead_s)
        if len(self._x) > WINDOW_S:
            del self._x[0], self._y[0]

    def _is_off(self, x_s: float, ahead_s: float) -> bool:
        assert self._fit is not None
        slope, offset, sigma = self._fit
        off = abs(ahead_s - offset - slope * (x_s - self._middle))
        return off > max(STEP_MS / 1e3, STEP_SIGMAS * sigma)

    @property
    def _middle(self) -> float:
        return (self._x[0] + self._x[-1]) / 2

    @property
    def span_s(self) -> float:
        """From the first point to the last."""
        return self._x[-1] - self._x[0] if self._x else 0.0

    def _fitted(self) -> tuple[float, float, float] | None:
        if self.span_s < LEAST_S:
            return None
        x, y = np.array(self._x), np.array(self._y)
        half = len(x) // 2
        slope = float(np.median((y[-half:] - y[:half]) / (x[-half:] - x[:half])))
        rest = y - slope * (x - self._middle)
        offset = float(np.median(rest))
        return slope, offset, _GAUSS * float(np.median(np.abs(rest - offset)))

    def facts(self) -> tuple[float, float, float] | None:
        """Drift in ppm, its standard deviation in ppm, that of a point in seconds; None: too early."""
        if self._fit is None:
            return None
        slope, _, sigma = self._fit
        half = len(self._x) // 2
        # slopes over half the span, each with the errors of two points; pi/2: a median in place of a mean
        spread = sigma * np.sqrt(2 * np.pi / 2 / half) / (self.span_s / 2)
        return 1e6 * slope, 1e6 * float(spread), sigma


class SampleClock:
    """Follows one sample clock.

    rate_hz : nominal.
    """

    def __init__(self, rate_hz: float) -> None:
        self._rate_hz = rate_hz
        self._times, self._host = Trend(), Trend()
        self._epoch: int | None = None
        self._origin = self._t_ns = self._received_ns = self._second = 0
        self._ahead: list[float] = []
        self._host_ahead: list[float] = []
        self._scatter: list[float] = []
        self._jumps_before = 0

    def resume(self, jumps: int) -> None:
        """Go on counting jumps after a restart; the rest is learned anew."""
        self._jumps_before = jumps

    def _begin(self) -> None:
        self._times.begin()
        self._host.begin()
        self._ahead.clear()
        self._host_ahead.clear()

    def push(self, epoch: int, first: int, t_ns: int, received_ns: int) -> bool:
        """Take a block's epoch, index, time and receipt on the host's monotonic clock (0: not known).

        With a new epoch the count begins anew, and what was learned is forgotten. Returns whether a second was over, so
        that `facts` may say something new.
        """
        if epoch != self._epoch:
            self._begin()
            self._epoch = epoch
            self._origin, self._t_ns, self._received_ns, self._second = first, t_ns, received_ns, 0
        nominal_s = (first - self._origin) / self._rate_hz
        over = int(nominal_s) != self._second
        if over:
            self._close()
            self._second = int(nominal_s)
        nominal_ns = round((first - self._origin) * 1e9 / self._rate_hz)
        self._ahead.append((t_ns - self._t_ns - nominal_ns) / 1e9)
        if received_ns and self._received_ns:
            self._host_ahead.append((received_ns - self._received_ns - nominal_ns) / 1e9)
        return over

    def _close(self) -> None:
        x_s = self._second + 0.5
        middle = median(self._ahead)
        self._times.push(x_s, middle)
        if len(self._ahead) > 2:
            self._scatter.append(_GAUSS * median(abs(ahead - middle) for ahead in self._ahead))
            del self._scatter[:-SCATTER_S]
        if self._host_ahead:
            self._host.push(x_s, min(self._host_ahead))
        self._ahead.clear()
        self._host_ahead.clear()

    @property
    def jumps(self) -> int:
        """Of the message times against the count, since the service started."""
        return self._jumps_before + self._times.jumps

    def facts(self) -> dict[str, Any]:
        """The `clock` of the status message."""
        return {
            "against": "t",
            **_figures(self._times),
            "jumps": self.jumps,
            "t_sigma_ms": self._t_sigma_ms(),
            "host": self._host_figures(),
        }

    def _t_sigma_ms(self) -> float | None:
        """Of one block's time: the larger of the scatter within seconds and of seconds about the line."""
        facts = self._times.facts()
        return None if facts is None else round(1e3 * max(facts[2], median(self._scatter or [0.0])), 4)

    def _host_figures(self) -> dict[str, Any] | None:
        figures = _figures(self._host)
        drift = figures["drift_ppm"]
        return None if drift is None or abs(drift) > NOT_REAL_PPM else figures


def _figures(trend: Trend) -> dict[str, Any]:
    facts = trend.facts()
    return {
        "drift_ppm": None if facts is None else round(facts[0], 3),
        "sigma_ppm": None if facts is None else round(facts[1], 3),
        "span_s": round(trend.span_s, 3),
    }
