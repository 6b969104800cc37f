"""Was it good? One sentence, with the figures and what theory expected."""

from __future__ import annotations

from typing import Any

from spatiq.results.wording import (
    count,
    fixed,
    interval,
    listing,
    number,
    pick,
    printable,
    ratio_of,
)

# Beyond this much SNR lost the receiver or the model of the channel is not what theory supposed.
NOTABLE_LOSS_DB = 0.5  # common practice, no source


def verdict(summary: dict[str, Any]) -> tuple[str, str]:
    """A word or two, and the sentence behind them."""
    frames = summary.get("frames") or {}
    found, lost = frames.get("found") or 0, frames.get("lost") or 0
    if not found:
        return "No frame found", _nothing(lost)
    parts = [_frames(frames)]
    ber, predicted = summary.get("ber"), summary.get("predicted_ber")
    if not pick(ber, "compared"):
        parts.append("no bit is known, so that no bit error ratio could be measured")
        if predicted is not None:
            parts.append(f"theory expects {number(predicted)} on the channel and noise measured")
    else:
        parts.append(_ratio(ber, predicted, summary.get("confidence")))
    loss = summary.get("implementation_loss_db")
    if pick(loss, "value") is not None:
        parts.append(_loss(loss))
    evm, snr = pick(summary, "evm", "percent"), pick(summary, "snr_db", "mean")
    parts.append(f"EVM {number(evm, '%')} at {number(snr, 'dB')} SNR")
    return _word(ber, predicted, loss, lost), "; ".join(parts) + "."


def _nothing(lost: int) -> str:
    return (
        f"Of {count(lost)} frames expected none was found." if lost else "No frame was found."
    ) + " Look at carrier offset, symbol rate and the sync section first."


def _frames(frames: dict[str, Any]) -> str:
    found, lost = frames["found"], frames.get("lost") or 0
    if not lost:
        return f"All {count(found)} frames expected were found"
    reasons = listing(frames.get("lost_by_reason"))
    return f"{count(found)} of {count(found + lost)} frames were found (lost: {reasons})"


def _ratio(ber: Any, predicted: float | None, confidence: float | None) -> str:
    level = f", {100 * confidence:g} %" if confidence else ""
    if pick(ber, "errors") == 0:
        told = f"no bit wrong of {count(ber['compared'])}: bit error ratio {ratio_of(ber)}{level}"
    else:
        told = f"bit error ratio {ratio_of(ber)} ({interval(ber['low'], ber['high'])}{level})"
    if predicted is None:
        return told
    return f"{told}, where theory expects {number(predicted)} on the channel and noise measured"


def _loss(loss: Any) -> str:
    ends = interval(pick(loss, "low"), pick(loss, "high"), "dB")
    worth = f" ({ends})" if ends else ""
    return f"measured against predicted, the loss is {fixed(loss['value'], 'dB')} of SNR{worth}"


def _word(ber: Any, predicted: float | None, loss: Any, lost: int) -> str:
    """Judged by theory alone: what is accepted is for limits to say."""
    apart = pick(loss, "value")
    if not pick(ber, "compared"):
        word = "Received, not compared"
    elif predicted is None:
        word = "Received, no prediction"
    elif ber["low"] <= predicted <= ber["high"]:
        word = "As theory expects"
    elif apart is not None and abs(apart) < NOTABLE_LOSS_DB:
        word = "Close to what theory expects"
    else:
        word = f"{'Better' if ber['high'] < predicted else 'Worse'} than theory expects"
    return f"{word}, frames lost" if lost else word


def sheet_facts(provenance: dict[str, str]) -> list[tuple[str, str]]:
    """What the title block of a recording's sheet states: label, value."""
    rate = float(provenance["sample_rate_hz"])
    carrier = provenance.get("carrier_hz") or ""
    samples = int(provenance["samples"])
    facts = [
        ("recording", provenance["recording_name"]),
        ("link", provenance["link_name"]),
        ("carrier", number(float(carrier) / 1e6, "MHz", 7) if carrier else "not stated"),
        ("sample rate", number(rate / 1e6, "MHz", 6)),
        ("symbol rate", number(float(provenance["symbol_rate_hz"]) / 1e3, "kHz", 6)),
        ("samples", f"{count(samples)} ({number(samples / rate, 's')})"),
        ("receive channels", provenance["channels"]),
        ("sample type", provenance["datatype"]),
        ("measured", provenance["measured_at"]),
        ("program", provenance["program"]),
        ("recording SHA-256", provenance["recording_sha256"]),
        ("link SHA-256", provenance["link_sha256"]),
    ]
    return [(label, printable(value)) for label, value in facts]
