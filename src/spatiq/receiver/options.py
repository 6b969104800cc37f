"""Receiver options: how to receive. The link description says what is on the air."""

from __future__ import annotations

from dataclasses import asdict, dataclass
from typing import Any

from spatiq.errors import InputError

# Log-likelihood ratios of the payload bits: see receiver/soft_output.py.
SOFT_OUTPUTS = ("none", "exact", "max-log")
# Of symbols that reach into their neighbours: see receiver/dispersive_chain.py.
CHANNELS = ("flat", "dispersive")
EQUALISERS = ("auto", "sequence", "mmse")
LARGEST_MEMORY = 12
# Whether samples are conjugated: see metrics/spectrum.py.
SPECTRA = ("auto", "normal", "inverted")


@dataclass(frozen=True)
class ReceiverOptions:
    """How to receive; the defaults suit a laboratory recording.

    Attributes:
        cfo_range: carrier offsets searched, +- this share of the symbol rate (0 to 0.25).
        false_alarm: probability that noise alone passes as a sync section, per tested lag and
            carrier bin.
        detector: registered name, or "module:function" of one's own.
        confidence: level of all intervals.
        compare_two_step: also run the two-step detector and count its errors.
        keep_symbols: keep received payload vectors and words in the results.
        soft_output: log-likelihood ratios of the payload bits: "none", "exact" or "max-log".
        max_clock_ppm: clock offsets expected, +- ppm; frames are tracked a little beyond.
        phase_noise_hz: linewidth of the oscillators' phase noise that carrier tracking expects.
        channel: "flat": a symbol is over before the next one; "dispersive": echoes reach into the
            symbols that follow.
        memory: on a dispersive channel, how many earlier symbols a received vector depends on;
            None: chosen by frame.
        equaliser: on a dispersive channel, "sequence" decides whole sequences, "mmse" equalises
            linearly and decides word by word; "auto": "mmse" where blocks have a cyclic prefix,
            else "sequence". Subcarriers are always decided one by one.
        survivors: sequences kept by the sequence detector from one symbol period to the next.
        spectrum: "normal", "inverted" (a mixer on the wrong side of the carrier, or I and Q
            swapped: samples are conjugated), or "auto": measuring looks at both when the first
            frames or their absence speak against the normal one; reception by itself takes it for
            normal.
        narrow_band: look for narrow-band noise and take it out. Only on request: the signal's own
            spectrum may pass for such noise in short recordings.
        block_size: samples read at a time; never changes a figure.
    """

    cfo_range: float = 0.02
    false_alarm: float = 1e-10
    detector: str = "maximum-likelihood"
    confidence: float = 0.95
    compare_two_step: bool = True
    keep_symbols: bool = False
    max_clock_ppm: float = 50.0
    phase_noise_hz: float = 0.0
    block_size: int = 1 << 18
    soft_output: str = "none"
    channel: str = "flat"
    memory: int | None = None
    equaliser: str = "auto"
    survivors: int = 64
    spectrum: str = "auto"
    narrow_band: bool = False

    def __post_init__(self) -> None:
        """Refuse values outside their range.

        Raises:
            InputError: naming the option, the value found and the range accepted.
        """
        bounds = {
            "cfo_range": (0.0, 0.25),
            "false_alarm": (1e-30, 0.1),
            "confidence": (0.5, 0.9999),
            "max_clock_ppm": (0.0, 1000.0),
            "phase_noise_hz": (0.0, 1e9),
            "block_size": (1024, 1 << 30),
            "survivors": (1, 65536),
        }
        for name, (low, high) in bounds.items():
            value = getattr(self, name)
            if not low <= value <= high:
                raise InputError("receiver options", name, value, f"a value from {low} to {high}")
        choices = {
            "soft_output": SOFT_OUTPUTS,
            "spectrum": SPECTRA,
            "channel": CHANNELS,
            "equaliser": EQUALISERS,
        }
        for name, accepted in choices.items():
            if getattr(self, name) not in accepted:
                raise InputError("receiver options", name, getattr(self, name), ", ".join(accepted))
        # The number may come from a file: anything may stand there.
        whole = self.memory is None or type(self.memory) is int
        if not whole or not 0 <= (self.memory or 0) <= LARGEST_MEMORY:
            expected = f"a whole number of symbols, 0 to {LARGEST_MEMORY}"
            raise InputError("receiver options", "memory", self.memory, expected)

    def as_dict(self) -> dict[str, Any]:
        """All options by name, for provenance."""
        return asdict(self)
