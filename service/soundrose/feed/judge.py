"""core: what is said of every hydrophone, from all that was found in a second; rules, hysteresis and words.

The first that applies (`not judged` before the first second is over):

    excluded      left out by the settings
    dead          no variation in the second, or no finite sample, and on from there until a clean second; or DEAD_DB
                  below the median of its neighbours in every octave
    clipped       more than CLIPPED_SHARE of the samples at full scale, until CLIPPED_LEAVE
    exchanged     its phases fit the place of another, whose phases fit its place
    reversed      its phases are turned by half a period against its neighbours'
    noisy         ABOVE_DB over the median of its neighbours in a third of the octaves, or FAR_DB in one
    intermittent  NaN, infinity or no variation in some part of the second; or it has come back (see below)
    weak          BELOW_DB under the median of its neighbours in more than half of the octaves
    good          none of these

Intermittent comes back: torn in RECURS of the last LOOK_BACK_S seconds, or off its usual level by STEP_DB in some part
of STEPS of them, until CALM_S seconds in a row were whole. Torn once, it loses only the hops in which it had no
readings.

Out of use: excluded, dead, exchanged, reversed, torn again and again, and noisy by FAR_DB in a third of the octaves.
Clipped and weak ones stay: what they say is less good, not wrong. So do those that are named for their level alone and
less than that: a blow beside the line, or a vessel that passes close, is heard so too, and no hydrophone is left out
for what it may have heard.
"""

from typing import Final, Literal, NamedTuple, get_args

import numpy as np
from numpy.typing import NDArray

from soundrose.feed.latch import Latch, Recent
from soundrose.feed.levels import STEP_DB, Excess
from soundrose.feed.phase import PolarityVerdict, Swaps

__all__ = ["CLIPPED_SHARE", "STATES", "Judge", "Second", "State"]

State = Literal[
    "excluded", "dead", "clipped", "exchanged", "reversed", "noisy", "intermittent", "weak", "good", "not judged"
]
STATES: Final = get_args(State)  #: in order of precedence; the index is the code in a snapshot

CLIPPED_SHARE: Final = 0.001  #: of the samples of a second: more than single clicks reach
CLIPPED_LEAVE: Final = 0.0003
DEAD_DB: Final = -30.0  #: a cable without its hydrophone
ABOVE_DB: Final = 6.0  #: twice the spread of two sounds that meet in step, and of usual sensitivities
FAR_DB: Final = 12.0  #: in one octave alone
BELOW_DB: Final = -6.0
SLACK_DB: Final = 1.5  #: less than the threshold before a state is left
LOOK_BACK_S: Final = 10
RECURS: Final = 2
STEPS: Final = 3  #: own shots every 10 s cannot reach it by falling on the edge of a part
CALM_S: Final = 5

Bools = NDArray[np.bool_]
Ints = NDArray[np.int64]


class Second(NamedTuple):
    """What was found. samples : instants.  parts : of a second.  All others (channels,): finite, clipped : int,
    samples.  flat : bool, no variation.  flat_parts : int.  low : lowest value, micropascal.  excess, polarity,
    swaps : None where nothing can be compared."""

    samples: int
    parts: int
    finite: Ints
    clipped: Ints
    flat: Bools
    flat_parts: Ints
    low: NDArray[np.float32]
    excess: Excess | None
    polarity: PolarityVerdict | None
    swaps: Swaps | None


class Judge:
    """Holds what was said so far.

    excluded : (channels,) bool, which always wins.  edges_hz : (bands + 1,) of the octaves.
    """

    def __init__(self, excluded: Bools, edges_hz: NDArray[np.float64]) -> None:
        n = len(excluded)
        self._excluded, self._edges = excluded, edges_hz
        self._dead = np.zeros(n, bool)
        self._silent, self._clipped = Latch(n, 2, 2), Latch(n, 1, 3)
        self._exchanged, self._reversed = Latch(n, 2, 3), Latch(n, 2, 3)
        self._noisy, self._weak, self._roaring = Latch(n, 2, 5), Latch(n, 2, 5), Latch(n, 2, 5)
        self._recurring, self._torn = Latch(n, 1, CALM_S), np.zeros(n, bool)
        self._stepping = Latch(n, 1, CALM_S)
        self._tears, self._steps = Recent(n, LOOK_BACK_S), Recent(n, LOOK_BACK_S)
        self._torn_count, self._step_count = np.zeros(n, np.int64), np.zeros(n, np.int64)
        self._partner, self._found = np.full(n, -1), ["" for _ in range(n)]
        self.codes = np.full(n, STATES.index("not judged"), np.uint8)
        self.codes[excluded] = STATES.index("excluded")

    @property
    def out(self) -> Bools:
        """(channels,) bool, out of use."""
        return (
            self._excluded | self._dead | self._silent.on | self._exchanged.on | self._reversed.on | self._roaring.on
            | self._recurring.on
        )  # fmt: skip

    def resume(self, codes: NDArray[np.uint8]) -> None:
        """Go on with the states (channels,) uint8 judged before a restart; what is good again leaves them as usual."""
        self.codes = np.where(self._excluded, STATES.index("excluded"), codes).astype(np.uint8)
        self._dead = self._is("dead")
        for state, latch in (
            ("dead", self._silent),
            ("clipped", self._clipped), ("exchanged", self._exchanged), ("reversed", self._reversed),
            ("noisy", self._noisy), ("intermittent", self._stepping), ("weak", self._weak),
        ):  # fmt: skip
            latch.resume(self._is(state))
        self._roaring.resume(self._is("noisy"))  # left out until judged: two seconds of a roar are worse in a map

    def _is(self, state: str) -> Bools:
        return np.asarray(self.codes == STATES.index(state))

    def push(self, second: Second) -> None:
        """Judge one second; `codes` (channels,), `out` and `why` stand after it."""
        self._from_samples(second)
        self._from_levels(second.excess)
        self._from_phases(second.polarity, second.swaps)
        conditions = (
            self._excluded, self._dead | self._silent.on, self._clipped.on, self._exchanged.on, self._reversed.on,
            self._noisy.on, self._torn | self._recurring.on | self._stepping.on, self._weak.on,
        )  # fmt: skip
        codes = np.full(len(self._dead), STATES.index("good"), np.uint8)
        for code in range(len(conditions) - 1, -1, -1):
            codes[conditions[code]] = code
        self.codes = codes

    def _from_samples(self, second: Second) -> None:
        use = ~self._excluded
        flat = (second.flat | (second.finite == 0)) & use
        self._torn = ((second.finite < second.samples) | (second.flat_parts > 0)) & use
        self._dead = flat | (self._dead & self._torn)
        share = second.clipped / second.samples
        self._clipped.push(share > CLIPPED_SHARE, (share <= CLIPPED_LEAVE) & ~flat)
        self._torn_count = self._tears.push(self._torn & ~flat)

    def _from_levels(self, excess: Excess | None) -> None:
        off = np.zeros(len(self._dead), bool) if excess is None else excess.parts_off > 0
        whole = ~self._torn & ~off & ~self._dead
        self._step_count = self._steps.push(off & ~self._excluded)
        self._recurring.push((self._torn_count >= RECURS) & self._torn & ~self._dead, ~self._torn & ~self._dead)
        self._stepping.push((self._step_count >= STEPS) & off & ~self._dead, whole)
        if excess is None or not excess.told.any():
            self._silent.push(np.zeros(len(whole), bool), whole)  # nothing to compare with: its own samples decide
            return
        judged, db = excess.judged & ~self._torn, excess.bands_db[:, excess.told]
        third, most = max(-(-db.shape[1] // 3), 1), db.shape[1] // 2 + 1
        ranked = np.sort(db, axis=1)
        widely, high, low = ranked[:, -third], ranked[:, -1], ranked[:, most - 1]
        self._noisy.push(
            judged & ~self._clipped.on & ((widely >= ABOVE_DB) | (high >= FAR_DB)),  # clipping makes noise: named so
            judged & (widely < ABOVE_DB - SLACK_DB) & (high < FAR_DB - SLACK_DB),
        )
        roars = judged & ~self._clipped.on & (widely >= FAR_DB)
        self._roaring.push(roars, judged & (widely < FAR_DB - SLACK_DB))
        self._weak.push(judged & (low <= BELOW_DB), judged & (low > BELOW_DB + SLACK_DB))
        self._silent.push(judged & (high <= DEAD_DB), judged & (high > DEAD_DB + SLACK_DB))

    def _from_phases(self, polarity: PolarityVerdict | None, swaps: Swaps | None) -> None:
        misplaced = self._exchanged.on
        if swaps is not None:
            self._exchanged.push(swaps.partner >= 0, swaps.stays & ~self._dead)
            self._partner = np.where(swaps.partner >= 0, swaps.partner, self._partner)
            misplaced = self._exchanged.on | ~swaps.stays
        if polarity is not None:
            self._reversed.push(polarity.reversed & ~misplaced, polarity.upright)

    def why(self, i: int, second: Second) -> str:
        """The reason and the figure of channel i, after `push(second)`."""
        match STATES[self.codes[i]]:
            case "excluded":
                return "left out by the settings (array.exclude)"
            case "dead":
                return self._why_dead(i, second)
            case "clipped":
                return _why_clipped(float(second.clipped[i]) / second.samples)
            case "exchanged":
                return self._why_exchanged(i)
            case "reversed":
                return _why_reversed(i, second.polarity)
            case "noisy":
                return self._why_level(i, second.excess, +1)
            case "intermittent":
                return self._why_torn(i, second)
            case "weak":
                return self._why_level(i, second.excess, -1)
            case _:
                return ""

    def _why_dead(self, i: int, second: Second) -> str:
        if not second.finite[i]:
            return "no finite sample in the second"
        if second.flat[i]:
            return f"no variation: every sample reads {second.low[i]:.6g} µPa"
        if self._dead[i]:
            return f"was dead, and is back after one clean second; {self._torn_now(i, second)}"
        return self._why_level(i, second.excess, -1)

    def _why_exchanged(self, i: int) -> str:
        partner = int(self._partner[i])
        if partner < 0:
            return "judged before a restart; not yet judged again"
        return f"its sound fits the place of hydrophone {partner}, and that one's fits here"

    def _why_level(self, i: int, excess: Excess | None, sign: int) -> str:
        if excess is None:
            return "was so when last compared with its neighbours"
        db = np.where(excess.told, sign * excess.bands_db[i], -np.inf)
        over = db >= min(ABOVE_DB - SLACK_DB, float(db.max()))
        places = np.flatnonzero(over)
        figure = float(np.median(db[over]))
        low, high = self._edges[places[0]], self._edges[places[-1] + 1]
        word = "above" if sign > 0 else "below"
        return f"{figure:.0f} dB {word} the median of its neighbours, {low:.0f}-{high:.0f} Hz"

    def _why_torn(self, i: int, second: Second) -> str:
        now = self._torn_now(i, second) if self._torn[i] else ""
        past = []
        if self._torn_count[i] > 1:
            past.append(f"torn in {self._torn_count[i]} of the last {LOOK_BACK_S} s")
        if self._step_count[i] >= 1:
            past.append(f"{STEP_DB:.0f} dB or more off its usual level in {self._step_count[i]} of {LOOK_BACK_S} s")
        return "; ".join([now, *past] if now else past) or f"was torn; whole again for less than {CALM_S} s"

    def _torn_now(self, i: int, second: Second) -> str:
        finite = int(second.finite[i])
        if finite < second.samples:
            return f"NaN or infinity in {100 * (1 - finite / second.samples):.3g} % of the second"
        return f"no variation in {second.flat_parts[i]} of {second.parts} parts of the second"


def _why_clipped(share: float) -> str:
    return f"{100 * share:.3g} % of the samples at full scale; up to {100 * CLIPPED_SHARE:g} % is good"


def _why_reversed(i: int, polarity: PolarityVerdict | None) -> str:
    if polarity is None or polarity.score[i] >= 0:
        return "phase was turned by half a period against its neighbours"
    return f"phase turned by half a period against its neighbours (agreement {polarity.score[i]:+.2f} of 1)"
