"""Every picture of a pack, drawn once and used in the folder and on the page.

An empty text stands for a picture there is nothing to draw in.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from synth.results import Design

if TYPE_CHECKING:
    from netlist.verification import Verification

__all__ = ["Drawings"]


@dataclass(frozen=True, kw_only=True)
class Drawings:
    """SVG texts by what they show."""

    schematic: str
    blocks: str
    bode: str
    noise: str = ""
    step: str = ""
    swings: str = ""

    def by_name(self) -> dict[str, str]:
        """The drawings by name, in the order of the attributes."""
        return {
            "schematic": self.schematic,
            "blocks": self.blocks,
            "bode": self.bode,
            "noise": self.noise,
            "step": self.step,
            "swings": self.swings,
        }
