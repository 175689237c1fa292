"""Languages that simulated instruments can speak instead of SCPI-99: invented, unlike it and unlike each other.

They exist so that dialects are tried on more than one tongue. Every word is made up for this purpose and means nothing
outside of it. Behind them are the same instruments, on the same board.
"""

from typing import Any

from bandproof.simulated_instruments import harbour, orchard
from bandproof.simulated_instruments.device import Device
from bandproof.simulated_instruments.speech import Speech

__all__ = ["NAMES", "teach"]

_TABLE: dict[str, dict[str, type[Speech[Any]]]] = {"orchard": orchard.SPEECHES, "harbour": harbour.SPEECHES}
NAMES = tuple(sorted(_TABLE))


def teach(language: str, role: str, device: Device) -> None:
    """Let an instrument understand a language and nothing else; the empty name leaves it at SCPI-99."""
    if language:
        speech = _TABLE[language][role](device)
        device.interpret, device.finish = speech.interpret, speech.finish
