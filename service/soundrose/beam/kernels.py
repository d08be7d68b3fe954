"""core: spectra of a frame in, power of every beam added to the rolling average, in pieces that stay in cache.

The Hann taper is applied AFTER beamforming, as three bins (Y[k]/2 - (Y[k-1] + Y[k+1])/4 = -1/4 of the second
difference along the bins): it is small where the wrap of the steering filters lies, and it is delayed with the beam.

Both kernels work in the same way on different weights. For each piece of `CHUNK` bins: operands from the spectra,
real single-precision products (bins outermost), second difference, squares, sum, average. A piece takes the last two
rows of the products of the piece before it, so nothing is computed twice. The piece length is a constant and frames
go one at a time, so that the same samples give the same bits whatever the backlog.
"""

from abc import ABC, abstractmethod
from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import NDArray

from soundrose.beam.frames import rows
from soundrose.beam.steering import BATCH, Steering, delay_transforms, kept_bins
from soundrose.errors import UsageError
from soundrose.settings_types import KernelChoice

__all__ = ["CHUNK", "FEWEST_TERMS", "GeneralKernel", "Kernel", "PairKernel", "make_kernel"]

#: bins worked on at once: at 64 hydrophones and 181 beams the two buffers are 0.4 MB, inside a core's own cache
CHUNK = 128

#: fewest terms of a product, made up with zeros: with the BLAS of the numpy wheels on x86 a product of fewer takes up
#: to three times LONGER than one of 32 (1012 bins, 73 x 24: 1.58 ms, with 32: 0.52 ms)
FEWEST_TERMS = 32

Floats = NDArray[np.float32]


class Kernel(ABC):
    """Beams of one band from the spectra of one frame.

    Power is kept as `content`, (sides, bins, columns) float32, in the kernel's own order of beams and unscaled:
    side 0 from forward, side 1 (pairs only) the mirror images. `in_order` turns it to (beams, bins). Its squares are
    those of the second difference: times `scale` (1/16) they are those of the Hann-tapered spectrum.

    UsageError where the steering filters do not fit the frame.
    """

    name: str
    sides: int
    scale = 1.0 / 16.0

    def __init__(self, steering: Steering, columns: int) -> None:
        steering.check_fits()
        self.steering = steering
        self.beams = len(steering.cos)
        self.bins = steering.bins[1] - steering.bins[0]
        self.columns = columns
        self._kept = kept_bins(steering.bins)
        self._carry = np.empty((self.sides, 2, 2 * columns), dtype=np.float32)
        self._one = np.empty((self.sides, CHUNK + 2, 2 * columns), dtype=np.float32)
        self._other = np.empty((self.sides, CHUNK + 1, 2 * columns), dtype=np.float32)
        self._power = np.empty((self.sides, CHUNK, columns), dtype=np.float32)

    def start(self) -> Floats:
        """An empty average: (sides, bins, columns) zeros."""
        return np.zeros((self.sides, self.bins, self.columns), dtype=np.float32)

    def step(
        self, spectra: NDArray[np.complex64], gain: float, decay: float, content: Floats,
        power: Floats | None = None, beams: NDArray[np.complex64] | None = None,
    ) -> None:  # fmt: skip
        """content = decay * content + gain * power of this frame.

        Parameters
        ----------
        spectra : (channels, N/2 + 1) complex64, band order, zero in channels not in use.
        gain, decay : >= 0.     content : from `start`, changed in place.
        power : filled with gain * power of this frame alone, laid out as `content`.
        beams : complex64, laid out as `content`, filled with the beams' spectra before the taper, times sqrt(gain).
        """
        amplitude, keep = np.float32(np.sqrt(gain)), np.float32(decay)
        for begin in range(0, self.bins, CHUNK):
            stop = min(begin + CHUNK, self.bins)
            self._products(spectra, begin, stop, amplitude)
            if beams is not None:
                self._gather(beams[:, begin:stop])
            squares = self._squares(stop - begin)
            if power is not None:
                power[:, begin:stop] = squares
            part = content[:, begin:stop]
            np.multiply(part, keep, out=part)
            np.add(part, squares, out=part)

    def in_order(self, content: NDArray[Any], out: NDArray[Any]) -> None:
        """(sides, bins, columns) as kept -> out (beams, bins), beams by rising cone angle."""
        images = self.beams - self.columns
        for begin in range(0, self.bins, CHUNK):
            piece = slice(begin, begin + CHUNK)
            out[: self.columns, piece] = content[0, piece].T
            if images:
                out[self.columns :, piece] = content[-1, piece, :images].T[::-1]

    def from_order(self, values: Floats) -> Floats:
        """(beams, bins) by rising cone angle -> (sides, bins, columns) as kept."""
        content = self.start()
        for side, ordered in zip(content, (values, values[::-1]), strict=False):
            side[:] = ordered[: self.columns].T
        return content

    def _products(self, spectra: NDArray[np.complex64], begin: int, stop: int, amplitude: np.float32) -> None:
        """Products of kept bins begin .. stop+2 into the first buffer; the first two are those carried over."""
        fresh = slice(begin, stop + 2)
        if begin:
            self._one[:, :2] = self._carry
            fresh = slice(begin + 2, stop + 2)
        rows_out = self._one[:, fresh.start - begin : stop + 2 - begin]
        self._multiply(self._bins_of(fresh, spectra), fresh, amplitude, rows_out.reshape(*rows_out.shape[:2], 2, -1))
        self._carry[:] = self._one[:, stop - begin : stop - begin + 2]

    def _squares(self, count: int) -> Floats:
        """(sides, count, columns) squares of the second differences of the products; the two buffers are used up."""
        products, first = self._one[:, : count + 2], self._other[:, : count + 1]
        np.subtract(products[:, 1:], products[:, :-1], out=first)
        second, beams = self._one[:, :count], self._other[:, :count]
        np.subtract(first[:, 1:], first[:, :-1], out=second)
        beams = self._unfold(second, beams)
        np.multiply(beams, beams, out=beams)
        power = self._power[:, :count]
        np.add(beams[:, :, : self.columns], beams[:, :, self.columns :], out=power)
        return power

    def _gather(self, out: NDArray[np.complex64]) -> None:
        """Beam spectra of the output bins of the piece, before the taper."""
        count = out.shape[1]
        beams = self._unfold(self._one[:, 1 : count + 1], self._other[:, :count])
        out.real, out.imag = beams[:, :, : self.columns], beams[:, :, self.columns :]

    def _bins_of(self, kept: slice, spectra: NDArray[np.complex64]) -> NDArray[np.complex64]:
        """(channels, bins) of the spectra at kept bins (bin -1 is bin 1, conjugate)."""
        first, stop = kept.start + self._kept[0], kept.stop + self._kept[0]
        if first >= 0:
            return spectra[:, first:stop]
        return np.concatenate([spectra[:, 1:2].conj(), spectra[:, :stop]], axis=1)

    @abstractmethod
    def _multiply(self, part: NDArray[np.complex64], kept: slice, amplitude: np.float32, out: Floats) -> None:
        """Products with the weights of these kept bins. part : (channels, n).  out : (sides, n, re and im, columns)."""

    @abstractmethod
    def _unfold(self, products: Floats, out: Floats) -> Floats:
        """(sides, n, 2 columns) sums of products -> beams, laid out alike, in `out` or where they are."""


class PairKernel(Kernel):
    """Two real products for half the beams, for a line symmetric about its middle.

    With sums s and differences d of mirrored hydrophones, and C + jS the weight of the forward one for the beam at
    +u, that beam is C.s + S.(jd) and its mirror image at -u is C.s - S.(jd).

    steering : must be `paired`. A hydrophone in the middle pairs with itself: s is twice it (with half the weight), d
    is zero. With an odd number of beams, broadside is worked out on both sides and shown once.
    """

    name = "pairs"
    sides = 2

    def __init__(self, steering: Steering, progress: Callable[[], object] = int) -> None:
        if not steering.paired or steering.mirror is None:
            raise UsageError(
                "kernel 'pairs' needs a line, shading and sampling skew symmetric about the middle; this band's are"
                " not: use kernel 'auto' or 'general'"
            )
        super().__init__(steering, (len(steering.cos) + 1) // 2)
        order = np.argsort(-steering.x_m, kind="stable")
        forward = order[: (len(order) + 1) // 2]
        aft = steering.mirror[forward]
        self._forward, self._aft = rows(forward), rows(aft)
        self._cosine, self._sine = self._weights(forward, np.where(aft == forward, 0.5, 1.0), progress)
        self._sum = np.empty((len(forward), CHUNK + 2), dtype=np.complex64)
        self._difference = np.empty((len(forward), CHUNK + 2), dtype=np.complex64)
        self._operands = np.zeros((2, CHUNK + 2, 2, self._cosine.shape[2]), dtype=np.float32)

    def _weights(
        self, forward: NDArray[np.intp], share: NDArray[np.float64], progress: Callable[[], object]
    ) -> tuple[Floats, Floats]:
        """C and S, each (kept bins, half the beams, terms), real and imaginary part of the forward weights."""
        steering, pairs = self.steering, len(forward)
        shape = (self._kept[1] - self._kept[0], self.columns, max(pairs, FEWEST_TERMS))
        cosine, sine = np.zeros(shape, dtype=np.float32), np.zeros(shape, dtype=np.float32)
        shading = share * steering.weights[forward]
        some = max(1, BATCH // pairs)  # beams at once
        for begin in range(0, self.columns, some):
            beams = slice(begin, min(begin + some, self.columns))
            delays = steering.samples(beams, forward)
            gain = np.tile(shading, len(delays))
            weighted = delay_transforms(delays.ravel(), steering.frame_length, self._kept, gain)
            turned = weighted.T.reshape(-1, *delays.shape)
            cosine[:, beams, :pairs], sine[:, beams, :pairs] = turned.real, turned.imag
            progress()
        return cosine, sine

    def _multiply(self, part: NDArray[np.complex64], kept: slice, amplitude: np.float32, out: Floats) -> None:
        count = part.shape[1]
        forward, aft = part[self._forward], part[self._aft]
        total, difference = self._sum[:, :count], self._difference[:, :count]
        np.add(forward, aft, out=total)
        np.subtract(forward, aft, out=difference)
        sums, turned = self._operands[:, :count]  # turned: j d, real part -Im d, imaginary part Re d
        pairs = len(total)
        np.multiply(total.real.T, amplitude, out=sums[:, 0, :pairs])
        np.multiply(total.imag.T, amplitude, out=sums[:, 1, :pairs])
        np.multiply(difference.imag.T, -amplitude, out=turned[:, 0, :pairs])
        np.multiply(difference.real.T, amplitude, out=turned[:, 1, :pairs])
        np.matmul(sums, self._cosine[kept].transpose(0, 2, 1), out=out[0])
        np.matmul(turned, self._sine[kept].transpose(0, 2, 1), out=out[1])

    def _unfold(self, products: Floats, out: Floats) -> Floats:
        np.add(products[0], products[1], out=out[0])
        np.subtract(products[0], products[1], out=out[1])
        return out


class GeneralKernel(Kernel):
    """One real product of twice the size for all beams: any line, shading and sampling skew.

    Rows [Re X, -Im X] and [Im X, Re X] times columns [Re W; Im W] give the real and the imaginary part.
    """

    name = "general"
    sides = 1

    def __init__(self, steering: Steering, progress: Callable[[], object] = int) -> None:
        super().__init__(steering, len(steering.cos))
        self._weights = self._make_weights(progress)
        self._operand = np.zeros((CHUNK + 2, 2, self._weights.shape[2]), dtype=np.float32)

    def _make_weights(self, progress: Callable[[], object]) -> Floats:
        """(kept bins, beams, terms): real parts of all channels, then imaginary parts."""
        steering, channels = self.steering, len(self.steering.x_m)
        terms = max(2 * channels, FEWEST_TERMS)
        weights = np.zeros((self._kept[1] - self._kept[0], self.beams, terms), dtype=np.float32)
        for beam_i in range(self.beams):
            delays = steering.samples(slice(beam_i, beam_i + 1), slice(None))[0]
            weighted = delay_transforms(delays, steering.frame_length, self._kept, steering.weights).T
            weights[:, beam_i, :channels] = weighted.real
            weights[:, beam_i, channels : 2 * channels] = weighted.imag
            progress()
        return weights

    def _multiply(self, part: NDArray[np.complex64], kept: slice, amplitude: np.float32, out: Floats) -> None:
        channels, count = part.shape
        operand = self._operand[:count]
        np.multiply(part.real.T, amplitude, out=operand[:, 0, :channels])
        np.multiply(part.imag.T, -amplitude, out=operand[:, 0, channels : 2 * channels])
        np.multiply(part.imag.T, amplitude, out=operand[:, 1, :channels])
        np.multiply(part.real.T, amplitude, out=operand[:, 1, channels : 2 * channels])
        np.matmul(operand, self._weights[kept].transpose(0, 2, 1), out=out[0])

    def _unfold(self, products: Floats, out: Floats) -> Floats:
        return products


def make_kernel(steering: Steering, choice: KernelChoice = "auto", progress: Callable[[], object] = int) -> Kernel:
    """The kernel for this steering, by geometry and settings, never by timing.

    progress : called again and again while weights are made, which takes a second for the largest arrays.
    UsageError for "pairs" on a line that is not symmetric, and for filters too long for the frame.
    """
    if choice == "general" or (choice == "auto" and not steering.paired):
        return GeneralKernel(steering, progress)
    return PairKernel(steering, progress)
