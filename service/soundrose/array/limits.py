"""core: what a line of hydrophones can and cannot do: widths, side lobes, images, gain, distance. Predicted, exact."""

from dataclasses import dataclass
from math import acos, ceil, copysign, degrees, log10, pi

import numpy as np
from numpy.typing import NDArray

from soundrose.array.geometry import TOLERANCE_M, band_geometry
from soundrose.array.shading import shading_weights
from soundrose.errors import UsageError
from soundrose.settings_types import BandSettings, Settings

__all__ = ["MAX_BEARING_WIDTH", "Line", "alias_onset_hz", "image_cosines", "line_of", "used_weights"]

#: half-power width in cosine beyond which a sound is heard but has no bearing
MAX_BEARING_WIDTH = 0.8
#: points per 1/aperture at which a pattern is looked over before a crossing or a peak is refined
POINTS = 32
#: terms of one block of a pattern's sum: 16 MB
PATTERN_BLOCK = 1 << 20


@dataclass(frozen=True, slots=True, eq=False)
class Line:
    """A shaded line in water.

    Its power pattern depends on one variable alone: v = f (u - u0) / c, in 1/m, with u the cosine of the arrival's
    cone angle and u0 that of the beam; so one half-power point serves all beams and frequencies.

    positions_m : (M, 3) float64.  weights : (M,) float64 >= 0, sum 1.  sound_speed_m_s : > 0.
    spacing_m : of the line with all its hydrophones, None where it is not equal.
    """

    positions_m: NDArray[np.float64]
    weights: NDArray[np.float64]
    sound_speed_m_s: float
    spacing_m: float | None = None

    @property
    def length_m(self) -> float:
        """Foremost to aftmost hydrophone along x, metres: of all, also those that weigh nothing."""
        return float(np.ptp(self.positions_m[:, 0]))

    @property
    def aperture_m(self) -> float:
        """The length the line acts with: each hydrophone stands for one (mean) spacing, so N d for equal spacing."""
        return self.length_m * len(self.weights) / max(1, len(self.weights) - 1)

    @property
    def transit_s(self) -> float:
        """Time a sound from endfire takes along the line, seconds."""
        return self.length_m / self.sound_speed_m_s

    def pattern(self, v: float | NDArray[np.float64]) -> NDArray[np.float64]:
        """Power response, 1 at v = 0, by direct summation. v : any shape, 1/m; returns that shape, float64."""
        flat = np.asarray(v, dtype=np.float64).ravel()
        rows = max(1, PATTERN_BLOCK // len(self.weights))
        blocks = [flat[i : i + rows] for i in range(0, len(flat), rows)]
        phases = (np.multiply.outer(block, self.positions_m[:, 0]) for block in blocks)
        powers = [np.abs(np.exp(2j * pi * phase) @ self.weights) ** 2 for phase in phases]
        return np.concatenate(powers).reshape(np.shape(v))

    def response(self, f_hz: float, beam_cos: float, cos: float | NDArray[np.float64]) -> NDArray[np.float64]:
        """Power that the beam to `beam_cos` reads of a plane wave of power 1 at `f_hz` from each `cos`."""
        apart = np.asarray(cos, dtype=np.float64) - beam_cos
        return self.pattern(np.asarray(f_hz / self.sound_speed_m_s * apart, dtype=np.float64))

    def fall_v(self, power: float) -> float | None:
        """The v at which the main lobe has fallen to `power` (0 < power < 1); None where it never does.

        The pattern is even in v, the lobe widest for a line whose weight sits in one place.
        """
        if not 0 < power < 1:
            raise UsageError(f"power is {power!r}; it must be above 0 and below 1")
        from scipy.optimize import brentq  # here, because loading it delays the start of what seldom needs it

        length = self._weighted_length()
        if length <= TOLERANCE_M:
            return None
        step = 1 / (POINTS * length)
        for lobe in range(8 * len(self.weights)):  # the main lobe is wide where the ends weigh next to nothing
            v = step * np.arange(lobe * POINTS + 1, (lobe + 1) * POINTS + 1, dtype=np.float64)
            under = np.flatnonzero(self.pattern(v) < power)
            if len(under):
                high = v[under[0]]
                return float(
                    brentq(lambda w: float(self.pattern(w)) - power, high - step, high, xtol=1e-15, rtol=1e-13)
                )
        return None

    def half_width_cos(self, f_hz: float) -> float | None:
        """Distance in cosine from a beam's centre to its half-power point at `f_hz`; None where there is none."""
        v = self.fall_v(0.5)
        return None if v is None or f_hz <= 0 else v * self.sound_speed_m_s / f_hz

    def beamwidth_deg(self, f_hz: float, beam_cos: float) -> float | None:
        """Half-power width in cone angle, degrees; None where the beam falls to half power on neither side.

        Where the half-power point would lie past endfire, the lobe is counted across the axis: twice the angle from
        the axis to its one edge, as a section through the line sees it.
        """
        half = self.half_width_cos(f_hz)
        if half is None:
            return None
        low, high = beam_cos - half, beam_cos + half
        if low < -1 and high > 1:
            return None
        if high > 1:
            return 2 * degrees(acos(low))
        if low < -1:
            return 2 * (180 - degrees(acos(high)))
        return degrees(acos(low) - acos(high))

    def side_lobe_db(self, v_max: float) -> float | None:
        """Highest response beyond the first minimum, up to `v_max` in 1/m, dB re the main lobe; None: there is none.

        For equal spacing 1/(2 spacing) covers the whole pattern once; above it the images begin.
        """
        from scipy.optimize import minimize_scalar  # here for the same reason as above

        length = self._weighted_length()
        v = np.arange(0, ceil(v_max * length * POINTS) + 1) / (POINTS * max(length, TOLERANCE_M))
        v = np.append(v[v < v_max], v_max)
        power = self.pattern(v)
        rising = np.flatnonzero(np.diff(power) > 0)
        if length <= TOLERANCE_M or not len(rising):
            return None
        top = int(rising[0] + np.argmax(power[rising[0] :]))
        ends = float(v[top - 1]), float(v[min(top + 1, len(v) - 1)])
        found = minimize_scalar(
            lambda w: -float(self.pattern(w)), bounds=ends, method="bounded", options={"xatol": 1e-12}
        )
        return 10 * log10(max(-float(found.fun), float(power[top])))

    def array_gain_db(self, f_hz: float, beam_cos: float) -> float:
        """Gain over one hydrophone against isotropic noise at `f_hz`, dB: -10 log10(w' Q w), Q steered sin(kr)/(kr).

        References
        ----------
        Cron and Sherman 1962, JASA 34, 1732-1736 (coherence of isotropic noise).
        """
        apart = np.linalg.norm(self.positions_m[:, None] - self.positions_m[None], axis=-1)
        along = self.positions_m[:, None, 0] - self.positions_m[None, :, 0]
        turns = f_hz / self.sound_speed_m_s
        noise = np.sinc(2 * turns * apart) * np.cos(2 * pi * turns * beam_cos * along)
        return -10 * log10(max(float(self.weights @ noise @ self.weights), 1e-30))

    def white_gain_db(self) -> float:
        """Gain over one hydrophone against noise that is independent at each hydrophone, dB."""
        return -10 * log10(float(self.weights @ self.weights))

    def far_field_m(self, f_hz: float, beam_cos: float) -> float:
        """(L sin theta)^2 / lambda with L the aperture: nearer than this a contact is out of focus."""
        return self.aperture_m**2 * (1 - beam_cos**2) * f_hz / self.sound_speed_m_s

    def focus_loss_db(self, f_hz: float, beam_cos: float, distance_m: float) -> float:
        """How much too low a beam reads a point source on its axis at `distance_m` from the line's middle, dB.

        Exact phases of the spherical wave, on-line positions; the differences in spreading loss are left out.
        """
        if distance_m <= 0:
            raise UsageError(f"distance_m is {distance_m!r}; it must be above 0")
        x = self.positions_m[:, 0]
        x = x - (x.max() + x.min()) / 2
        ranges = np.sqrt(distance_m**2 + x**2 - 2 * distance_m * beam_cos * x)
        late = (ranges - distance_m + x * beam_cos) * f_hz / self.sound_speed_m_s
        return -20 * log10(max(float(np.abs(np.exp(-2j * pi * late) @ self.weights)), 1e-15))

    def scalloping_db(self, f_hz: float, beams: int) -> float:
        """Loss of a plane wave half way between two of `beams` evenly spaced in cosine, on the nearer beam, dB."""
        return -10 * log10(max(float(self.pattern(f_hz / self.sound_speed_m_s / (beams - 1))), 1e-30))

    def beams_for(self, f_hz: float, loss_db: float) -> int:
        """The fewest beams whose scalloping loss at `f_hz` is at most `loss_db` (> 0)."""
        v = self.fall_v(10 ** (-loss_db / 10))
        return 2 if v is None else max(2, 1 + ceil(f_hz / self.sound_speed_m_s / v - 1e-9))

    def _weighted_length(self) -> float:
        return float(np.ptp(self.positions_m[self.weights != 0, 0]))


def used_weights(settings: Settings, band: BandSettings) -> NDArray[np.float64]:
    """(M,) weights in force, band order: those left out are 0, the rest brought back to the sum 1."""
    geometry = band_geometry(settings, band)
    weights = shading_weights(band.shading, geometry, band.shading_db)
    weights = np.where(np.isin(geometry.channels, settings.array.exclude), 0.0, weights)
    total = float(weights.sum())
    if not total > 0:
        raise UsageError(f"band {band.name!r}: no hydrophone with weight is left; exclude fewer")
    return weights / total


def line_of(settings: Settings, band: BandSettings) -> Line:
    """The line of a band as configured, with the hydrophones in use and the sound speed of the settings."""
    geometry = band_geometry(settings, band)
    return Line(geometry.positions_m, used_weights(settings, band), settings.water.sound_speed_m_s, geometry.spacing_m)


def alias_onset_hz(spacing_m: float, sound_speed_m_s: float, beam_cos: float) -> float:
    """Frequency from which a beam to `beam_cos` has an image of full height among the real directions, Hz.

    References
    ----------
    Van Trees 2002, Optimum Array Processing, ch. 2: d/lambda < 1/(1 + |cos theta0|).
    """
    return sound_speed_m_s / (spacing_m * (1 + abs(beam_cos)))


def image_cosines(spacing_m: float, sound_speed_m_s: float, f_hz: float, beam_cos: float) -> tuple[float, ...]:
    """Cosines of the images a beam to `beam_cos` hears as well as its own direction at `f_hz`: u0 + k c/(f d).

    Falling; none below the alias onset. An image on the axis to within rounding counts.
    """
    if not min(spacing_m, f_hz) > 0:
        raise UsageError("spacing_m and f_hz must be above 0")
    step = sound_speed_m_s / (f_hz * spacing_m)
    reach = ceil(2 / step) + 1
    near = (beam_cos + k * step for k in range(reach, -reach - 1, -1) if k)
    # onto the axis where it is there but for rounding: 1e-16 in cosine is 1e-6 degrees at endfire
    return tuple(copysign(1.0, u) if abs(u) > 1 - 1e-12 else u for u in near if abs(u) <= 1 + 1e-12)
