"""What flows through the chain, and what a stage of the chain is.

Conventions that hold everywhere:

* Time is the last axis and is counted in samples. Sample ``k`` of every stream is the same instant on the air as
  sample ``k`` of the stage's input (scaled by the ratio of rates where the rate changes): **a stage takes its own
  delay out** by dropping as many leading outputs as it lags, and ``flush`` delivers the rest, so after a flush as much
  has come out as went in. ``delay_samples`` tells how far the output runs behind while streaming.
* Blocks of a group of channels are ``(n_channels, n_samples)``. Any split of the input gives the same output, bit for
  bit: stages work on quanta of their own choosing inside.
* I/Q is ``complex64`` against a full scale of 1.0, audio ``float32``; frequencies, phases and long sums ``float64``.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Protocol, TypeAlias

import numpy as np
from numpy.typing import NDArray

ComplexBlock: TypeAlias = NDArray[np.complex64]
FloatBlock: TypeAlias = NDArray[np.float32]
Floats: TypeAlias = NDArray[np.float64]
Bools: TypeAlias = NDArray[np.bool_]
Counts: TypeAlias = NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class Block:
    """Consecutive samples of a wideband stream.

    iq : complex64, shape (n,), full scale 1.0.
    index : absolute index of the first sample; samples lost on the way count.
    samples_lost : how many samples are missing right before this block.
    overloaded : how many samples of this block touched the converter's rails.
    centre_hz : frequency at the middle from this block on, where it has changed; None where it has not. Then more samples
        are missing before it than the channel bank remembers.
    """

    iq: ComplexBlock
    index: int
    samples_lost: int = 0
    overloaded: int = 0
    centre_hz: float | None = None


@dataclass(frozen=True, slots=True)
class Reading:
    """A measured figure and one standard deviation of its error, in the same unit."""

    value: float
    uncertainty: float

    def as_json(self) -> dict[str, float]:
        """The figure as the summary writes it."""
        return {"value": self.value, "uncertainty": self.uncertainty}


class Stage(Protocol):
    """Turns a stream of blocks into a stream of blocks; see the module's conventions."""

    def process(self, block: NDArray[Any]) -> NDArray[Any]:
        """Whatever output has become complete; any length goes in, 0 included."""
        ...

    def flush(self) -> NDArray[Any]:
        """The tail, as long as the delay; a second flush is empty."""
        ...

    def reset(self) -> None:
        """As new, with the same settings."""
        ...

    @property
    def delay_samples(self) -> int:
        """How many samples of its own output rate the stage lags behind while streaming."""
        ...
