"""Names what was measured: the emission, how sure, the runner-up, and why; or says that it can't be told."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from rxchain.identify.evidence import FAMILIES, FAMILY_OF, SIDED, TEMPLATES, EvidenceTable, by_family, evidence_table
from rxchain.identify.measurements import MEANING, NAMES, Measured
from rxchain.identify.steady_tones import STEADY
from rxchain.streams import Floats

NOISE_ONLY, FOREIGN, CANT_TELL = "noise only", "not of this family", "can't tell"
DOUBT = 0.5  # below it no name is given
SURE = 0.9
SURE_OF_TONES = 0.97  # a name for what carries held tones; below it half are wrong
_REASONS = 3
_VESTIGIAL = ("C3E", "VSB-SC")
_OTHER_SIDE = (
    -0.5
)  # balance beyond a vestige, which only the true side passes: a faded vestige can be the stronger below

# What limits the telling apart of two families, whatever the method.
_PAIRS: dict[frozenset[str], str] = {
    frozenset(
        ("QAM", "B8E")
    ): "two messages without a pilot: in quadrature and on two sides differ only while one talks",
    frozenset(("QAM", "DSB-SC")): "two messages in quadrature are one double sideband while the second is silent",
    frozenset(("B8E", "J3E")): "with one sideband silent, independent sidebands are a single one",
    frozenset(("J3E", "R3E")): "where a reduced carrier ends and a suppressed one begins is a convention",
    frozenset(("R3E", "H3E")): "no class is defined for a carrier 6 to 16 dB below peak envelope power",
    frozenset(("C3E", "H3E")): "they differ only in what the message holds below the vestige's edge",
    frozenset(("C3E", "A3E")): "a vestige as wide as the message, or a faded sideband, makes them alike",
    frozenset(("A3E", "AM-STEREO")): "with equal left and right and no pilot they are the same",
    frozenset(("A3E", "OTHER")): "sidebands under the noise leave a bare carrier; a small phase swing looks much alike",
    frozenset(("H3E", "OTHER")): "with its sideband under the noise it is a bare carrier",
    frozenset(("C3E", "OTHER")): "with its sidebands under the noise it is a bare carrier",
    frozenset(("J3E", "NOISE")): "in a pause of the message a suppressed carrier leaves nothing to see",
    frozenset(("A1A", "OTHER")): "a key held down is a bare carrier",
    frozenset(("DSB-SC", "OTHER")): "two-level data on a double sideband are two-phase keying",
}
_TONES = "its message is steady tones, which many emissions would carry alike"
_ASSUMED_SIDE = "no carrier shows: the side follows from the frequency taken for it"


@dataclass(frozen=True, slots=True)
class Guess:
    """What a channel holds.

    name : of an emission, or ``noise only``, ``not of this family``, ``can't tell``. confidence : chance that it is
    right; of ``can't tell`` that of the likeliest. kind : of what is not of the family, else "". runner_up and its chance.
    reasons : the three measurements that speak most for it against the runner-up. notes : what cannot be known.
    reference_hz : carrier, or where it would be, from the channel's middle. reference : what tells it: ``line``,
    ``square`` (of the signal), ``voice`` (its harmonics), ``edge`` (of the band), or ``nominal``.
    firm : whether more of the same signal would hardly change it.
    """

    name: str
    confidence: float
    kind: str
    runner_up: str
    runner_up_confidence: float
    reasons: tuple[str, ...]
    notes: tuple[str, ...]
    reference_hz: float
    reference: str
    seconds: float
    firm: bool = False

    @property
    def is_emission(self) -> bool:
        """Whether it names an emission that can be received."""
        return self.name not in (NOISE_ONLY, FOREIGN, CANT_TELL)


def name_all(measured: Measured, table: EvidenceTable | None = None) -> list[Guess]:
    """A guess for each channel measured."""
    table = table or evidence_table()
    scores = table.scores(measured.values, measured.seconds)
    return [name_one(measured, k, scores[k], table) for k in range(len(scores))]


def name_one(measured: Measured, row: int, scores: Floats, table: EvidenceTable) -> Guess:
    """The guess that a channel's evidence (templates,) leads to; its measurements give the reasons."""
    chances = by_family(scores[None])[0]
    first, second = (int(k) for k in np.argsort(-chances)[:2])
    one, other = _likeliest(first, scores), _likeliest(second, scores)
    is_upper = _is_upper(measured, row, FAMILIES[first])
    name = _name(first, is_upper)
    confidence = float(chances[first])
    notes = []
    if confidence < SURE and (pair := _PAIRS.get(frozenset((FAMILIES[first], FAMILIES[second])))):
        notes.append(pair)
    has_reference = bool(measured.is_line[row] or measured.is_square[row])
    if FAMILIES[first] in SIDED and not has_reference:
        notes.append(_ASSUMED_SIDE)
    is_told = confidence >= DOUBT
    if measured.steady_tones[row] > STEADY and _may_carry_tones(one) and confidence < SURE_OF_TONES:
        is_told = False
        notes.append(_TONES)
    return Guess(
        name=name if is_told else CANT_TELL,
        confidence=confidence,
        kind=TEMPLATES[one].split("/")[1] if name == FOREIGN else "",
        runner_up=_name(second, _is_upper(measured, row, FAMILIES[second])),
        runner_up_confidence=float(chances[second]),
        reasons=_reasons(measured.values[row], measured.seconds, one, other, table),
        notes=tuple(notes),
        reference_hz=float(measured.reference_hz[row]),
        reference="line" if measured.is_line[row] else "square" if measured.is_square[row] else "nominal",
        seconds=measured.seconds,
    )


def _is_upper(measured: Measured, row: int, family: str) -> bool:
    """The stronger side; of a vestigial emission that which is the stronger beyond the vestige."""
    is_other = family in _VESTIGIAL and measured.values[row, NAMES.index("bal_hi")] < _OTHER_SIDE
    return bool(measured.is_upper[row]) != bool(is_other)


def _may_carry_tones(template: int) -> bool:
    """Whether held tones could be its message, or it be taken for what carries them; keying and data are no tones."""
    family, _, kind = TEMPLATES[template].partition("/")
    return family not in ("NOISE", "A1A", "OTHER") or kind == "bare carrier"


def _name(family: int, is_upper: bool) -> str:
    match FAMILIES[family]:
        case "NOISE":
            return NOISE_ONLY
        case "OTHER":
            return FOREIGN
        case name if name in SIDED:
            return f"{name}-USB" if is_upper else f"{name}-LSB"
        case name:
            return name


def _likeliest(family: int, scores: Floats) -> int:
    templates = np.flatnonzero(family == FAMILY_OF)
    return int(templates[np.argmax(scores[templates])])


def _reasons(values: Floats, seconds: float, one: int, other: int, table: EvidenceTable) -> tuple[str, ...]:
    terms = table.terms(values, seconds, one, other)
    strongest = [k for k in np.argsort(-terms)[:_REASONS] if terms[k] > 0]
    return tuple(f"{MEANING[NAMES[k]][2]}: {values[k]:.2g}" for k in strongest)
