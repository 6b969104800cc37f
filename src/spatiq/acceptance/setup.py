"""How the transmitter under test is connected, and what that set-up cannot tell."""

from __future__ import annotations

from enum import StrEnum


class Setup(StrEnum):
    """How the antenna ports reach the receive channels."""

    OVER_AIR = "over-air"
    COMBINED = "combined"
    PORTS = "ports"


PATH_LOSS = "antenna gain and path loss together"
_RECEIVER = (
    "Carrier and clock are measured against the receiver's reference, and receiver noise is in "
    "every error vector."
)
_LIMITS = {
    Setup.OVER_AIR: (
        "Over the air, an antenna's power, the imbalance and the signatures hold antenna gain and "
        "path loss together; leakage, switching overlap and isolation cannot be told."
    ),
    Setup.COMBINED: (
        "Through a combiner, an antenna that sends when it should be silent is seen only as error "
        "of the symbols; isolation cannot be told. Signatures are the combiner's."
    ),
    Setup.PORTS: "With a receive channel for each port, crosstalk of the cables counts as leakage.",
}
_MIXED = (
    "Without a calibration, gain differences between receive channels are laid to the transmitter."
)


def cannot_tell(setup: Setup, calibrated: bool) -> list[str]:
    """What the set-up cannot tell, in sentences for the report."""
    told = [_LIMITS[setup], _RECEIVER]
    return told if calibrated else [*told, _MIXED]
