"""What a chain is made from that does not exist yet, so that it can be made where it is to run."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fellwalk.chain import Chain
from fellwalk.density import Density
from fellwalk.settings import Settings
from fellwalk.settled import SettledChain

__all__ = ["Fresh"]


@dataclass(frozen=True, eq=False)
class Fresh:
    """A chain to be: its settings, the settled part it takes over, where it starts (dimension,) in free coordinates,
    and its seed as (entropy, spawn key)."""

    settings: Settings
    part: SettledChain
    position: NDArray[np.float64]
    seed: tuple[int, tuple[int, ...]]

    def chain(self, density: Density) -> Chain:
        """Make it; this takes one gradient. Errors: StartError, and what the density raises."""
        entropy, key = self.seed
        return Chain._with_settings(density, self.settings, self.position,
                                    np.random.SeedSequence(entropy, spawn_key=key), None, self.part)
