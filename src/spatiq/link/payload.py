"""The payload as bits: fields -> plain bits -> scrambled bits as sent, and back."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import ArrayLike, NDArray

from spatiq.errors import InputError
from spatiq.link.payload_fields import (
    Bits,
    CounterSource,
    CrcSource,
    FieldSpan,
    Frames,
    join_value,
)
from spatiq.signal.scramblers import Scrambler

COUNTABLE = ("prbs", "file", "fixed")


@dataclass(frozen=True, eq=False)
class PayloadFormat:
    """Fields of a frame's payload, in the order sent.

    Word i of the payload is bits i*b..(i+1)*b-1 of the bits as sent.

    Attributes:
        n_bits: payload bits per frame.
        fields: they cover bits 0..n_bits-1 without gap; padding is the last, if any.
        scrambler: applied to all n_bits, anew in each frame; None for none.
        known_mask: bool, shape (n_bits,); plain bits that the receiver can count: of prbs, file and
            fixed fields. Padding is no reference: some zeros would pass for the whole payload.
        reference_mask: bool, shape (n_bits,); plain bits that follow from the frame number: the
            same, counters, and check bits over nothing but such bits.
    """

    n_bits: int
    fields: tuple[FieldSpan, ...]
    scrambler: Scrambler | None = None
    known_mask: NDArray[np.bool_] = field(init=False)
    reference_mask: NDArray[np.bool_] = field(init=False)

    def __post_init__(self) -> None:
        """Derive the masks."""
        known = np.zeros(self.n_bits, np.bool_)
        follows = np.zeros(self.n_bits, np.bool_)
        for span in self.fields:
            known[span.start : span.stop] = span.type in COUNTABLE and not span.padding
            if isinstance(span.source, CrcSource):
                covered = (self.fields[i] for i in span.source.covers)
                fixed = all(follows[c.start : c.stop].all() for c in covered)
            else:
                fixed = span.source is not None
            follows[span.start : span.stop] = fixed
        object.__setattr__(self, "known_mask", known)
        object.__setattr__(self, "reference_mask", follows)

    @property
    def data_bits(self) -> int:
        """Bits per frame that are data, unknown to the receiver."""
        return sum(s.width for s in self.fields if s.type == "data")

    @property
    def check_width(self) -> int:
        """Bits per frame that are checks over others."""
        return sum(s.width for s in self.fields if isinstance(s.source, CrcSource))

    @property
    def has_reference(self) -> bool:
        """True when the receiver can count bit errors."""
        return bool(self.known_mask.any())

    @property
    def frame_dependent(self) -> bool:
        """True when the reference depends on the frame number."""
        return any(
            s.source is not None
            and not isinstance(s.source, CrcSource)
            and s.source.frame_dependent
            for s in self.fields
        )

    @property
    def running(self) -> FieldSpan | None:
        """The first prbs or file field that runs on from frame to frame, if any."""
        return next((s for s in self.fields if s.is_running), None)

    def encode(self, frame_numbers: ArrayLike, data_bits: ArrayLike | None = None) -> Bits:
        """Payload bits as sent.

        Args:
            frame_numbers: whole numbers >= 0, shape (F,).
            data_bits: 0/1, shape (F, self.data_bits), the bits of the data fields in order; needed
                when there are such fields.

        Returns:
            uint8, shape (F, n_bits), scrambled.

        Raises:
            InputError: data bits missing or of the wrong shape, or a negative frame number.
        """
        frames = _frame_numbers(frame_numbers)
        plain = self._plain(frames, self._checked_data(frames.size, data_bits))
        return plain if self.scrambler is None else self.scrambler.scramble(plain)

    def descramble(self, bits: ArrayLike) -> Bits:
        """Bits as received, shape (F, n_bits) -> plain bits of the same shape."""
        received = self._checked(bits)
        return received if self.scrambler is None else self.scrambler.descramble(received)

    def reference(self, frame_numbers: ArrayLike) -> Bits:
        """Plain bits that follow from the frame number, 0 elsewhere: uint8, shape (F, n_bits).

        Which bits follow is said by `reference_mask`.
        """
        frames = _frame_numbers(frame_numbers)
        nothing = np.zeros((frames.size, self.data_bits), np.uint8)
        return np.where(self.reference_mask, self._plain(frames, nothing), np.uint8(0))

    def crc_ok(self, plain: ArrayLike) -> NDArray[np.bool_] | None:
        """Whether all check fields agree, shape (F,); None when there are none.

        Args:
            plain: descrambled bits, shape (F, n_bits).
        """
        checks = [s for s in self.fields if isinstance(s.source, CrcSource)]
        if not checks:
            return None
        bits = self._checked(plain)
        agree = np.ones(bits.shape[0], np.bool_)
        for span in checks:
            agree &= (bits[:, span.start : span.stop] == self._check_bits(span, bits)).all(axis=1)
        return agree

    def counter(self, plain: ArrayLike) -> Frames | None:
        """Value of the first counter field, int64, shape (F,); None when there is none.

        Args:
            plain: descrambled bits, shape (F, n_bits).
        """
        bits = self._checked(plain)
        for span in self.fields:
            if isinstance(span.source, CounterSource):
                return join_value(bits[:, span.start : span.stop], span.source.msb_first)
        return None

    def _plain(self, frames: Frames, data: Bits) -> Bits:
        plain = np.zeros((frames.size, self.n_bits), np.uint8)
        used = 0
        for span in self.fields:
            part = plain[:, span.start : span.stop]
            if span.source is None:
                part[:] = data[:, used : used + span.width]
                used += span.width
            elif isinstance(span.source, CrcSource):
                part[:] = self._check_bits(span, plain)
            else:
                part[:] = span.source.bits(frames, span.width)
        return plain

    def _check_bits(self, span: FieldSpan, plain: Bits) -> Bits:
        if not isinstance(span.source, CrcSource):
            raise TypeError(f"field {span.type} has no check bits")
        covered = [self.fields[i] for i in span.source.covers]
        return span.source.crc.compute(
            np.concatenate([plain[:, c.start : c.stop] for c in covered], axis=1)
        )

    def _checked(self, bits: ArrayLike) -> Bits:
        frames = np.asarray(bits)
        if frames.ndim != 2 or frames.shape[1] != self.n_bits:
            raise InputError(
                "payload", "bits", f"shape {frames.shape}", f"frames by {self.n_bits} bits"
            )
        return frames.astype(np.uint8, copy=False)

    def _checked_data(self, frames: int, data_bits: ArrayLike | None) -> Bits:
        expected = f"0 and 1, {frames} frames by {self.data_bits} bits"
        if data_bits is None:
            if self.data_bits:
                raise InputError("payload", "data bits", "nothing", expected)
            return np.zeros((frames, 0), np.uint8)
        data = np.asarray(data_bits)
        if data.shape != (frames, self.data_bits):
            raise InputError("payload", "data bits", f"shape {data.shape}", expected)
        if not np.isin(data, (0, 1)).all():
            raise InputError("payload", "data bits", "another value", expected)
        return data.astype(np.uint8)


def _frame_numbers(given: ArrayLike) -> Frames:
    frames = np.asarray(given)
    if frames.ndim != 1 or (frames.size and frames.dtype.kind not in "iu"):
        raise InputError(
            "payload", "frame numbers", f"{frames.dtype} {frames.shape}", "whole numbers, (F,)"
        )
    if frames.size and (int(frames.min()) < 0 or int(frames.max()) >= 1 << 62):
        raise InputError(
            "payload", "frame numbers", f"{frames.min()} to {frames.max()}", "0 to 2^62 - 1"
        )
    return frames.astype(np.int64)
