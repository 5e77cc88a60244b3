"""Evidence adds up: one piecewise-linear curve a measurement and template, in nats; a softmax of the sums is the chance.

The curves are learnt by ``python -m rxchain.identify.learning`` from the project's own synthesis. Sums of curves are
calibrated by construction and each guess can be explained by its largest terms.
"""

from __future__ import annotations

from functools import cache
from pathlib import Path

import numpy as np

from rxchain.errors import RequestError
from rxchain.identify.measurements import NAMES
from rxchain.streams import Floats

TEMPLATES = (
    "NOISE", "A3E", "DSB-SC", "J3E", "R3E", "H3E", "B8E", "B8E/no pilot", "C3E", "VSB-SC", "QAM", "QAM/no pilot",
    "AM-STEREO", "A1A", "OTHER/angle modulation", "OTHER/frequency-shift keying", "OTHER/phase-shift keying",
    "OTHER/bare carrier", "OTHER/many tones",
)  # fmt: skip
FAMILIES = tuple(dict.fromkeys(template.split("/")[0] for template in TEMPLATES))
SIDED = frozenset(("J3E", "R3E", "H3E", "C3E", "VSB-SC"))
FAMILY_OF = np.array([FAMILIES.index(template.split("/")[0]) for template in TEMPLATES])

_FILE = Path(__file__).with_name("evidence.npz")


class EvidenceTable:
    """The learnt curves.

    seconds : (durations,), ascending: lengths of the windows they were learnt on; between them the evidence is
        interpolated in the logarithm of time. knots : (durations, measurements, knots): where the curves bend.
        weights : (durations, templates, measurements * knots), nats.
    """

    def __init__(self, seconds: Floats, knots: Floats, weights: Floats) -> None:
        self.seconds, self.knots, self.weights = seconds, knots, weights.astype(np.float64)

    def scores(self, values: Floats, seconds: float) -> Floats:
        """Nats for each template, (windows, templates), of measurements (windows, 21)."""
        at, grid = np.log(seconds), np.log(self.seconds)
        at = float(np.clip(at, grid[0], grid[-1]))
        k = min(int(np.searchsorted(grid, at, side="right")) - 1, len(grid) - 2)
        part = (at - grid[k]) / (grid[k + 1] - grid[k])
        before, after = (hats(values, self.knots[j]) @ self.weights[j].T for j in (k, k + 1))
        return np.asarray((1.0 - part) * before + part * after)

    def probabilities(self, values: Floats, seconds: float) -> Floats:
        """Chance of each family, (windows, families)."""
        return by_family(self.scores(values, seconds))

    def terms(self, values: Floats, seconds: float, one: int, other: int) -> Floats:
        """What each measurement of one window, (21,), says for template ``one`` over ``other``, nats, (21,)."""
        k = int(np.argmin(np.abs(np.log(self.seconds / seconds))))
        difference = self.weights[k][one] - self.weights[k][other]
        return np.asarray((hats(values[None], self.knots[k])[0] * difference).reshape(len(NAMES), -1).sum(axis=1))


def by_family(scores: Floats) -> Floats:
    """Softmax over the templates, summed into families; (windows, families)."""
    chances = np.exp(scores - scores.max(axis=1, keepdims=True))
    chances /= chances.sum(axis=1, keepdims=True)
    families = np.zeros((len(scores), len(FAMILIES)))
    np.add.at(families.T, FAMILY_OF, chances.T)
    return families


def hats(values: Floats, knots: Floats) -> Floats:
    """The piecewise-linear basis, (windows, measurements * knots), of values (windows, measurements).

    Each measurement is worth 1, shared between the two knots on either side of it.

    >>> hats(np.array([[0.25]]), np.array([[0.0, 1.0, 2.0]])).tolist()
    [[0.75, 0.25, 0.0]]
    """
    n, m = values.shape
    basis = np.zeros((n, m, knots.shape[1]))
    rows = np.arange(n)
    for column, at in enumerate(knots):
        clipped = np.clip(values[:, column], at[0], at[-1])
        left = np.clip(np.searchsorted(at, clipped, side="right") - 1, 0, len(at) - 2)
        part = (clipped - at[left]) / (at[left + 1] - at[left])
        basis[rows, column, left], basis[rows, column, left + 1] = 1.0 - part, part
    return basis.reshape(n, -1)


@cache
def evidence_table() -> EvidenceTable:
    """The table that was learnt and is shipped; raises :class:`RequestError` where it is missing."""
    try:
        with np.load(_FILE) as stored:
            return EvidenceTable(stored["seconds"], stored["knots"], stored["weights"])
    except OSError as error:
        raise RequestError(
            f"identify: the table of evidence is missing ({error.strerror}); python -m rxchain.identify.learning makes it"
        ) from error
