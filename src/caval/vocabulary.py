"""The one table of terms: wave or span, table column, annotation text, WFDB code, MNE description, meaning.

Docs, errors, tables, annotation tracks and tests are made from this table; nothing else spells a mark.
"""

from __future__ import annotations

from dataclasses import dataclass

__all__ = [
    "NOTE_CODE", "RHYTHMS", "RHYTHM_CODE", "SPANS", "STATES", "WAVES", "RhythmTerm", "SpanTerm", "WaveTerm", "mark_text", "parse_text",
    "rhythm_text", "span_text",
]

NOTE_CODE = 22
"""WFDB annotation code of a note with text (symbol ``"``)."""
RHYTHM_CODE = 28
"""WFDB annotation code of a rhythm change (symbol ``+``)."""

STATES = ("clear", "fused", "weak", "absent", "unusable")
"""States of a wave in the beat table; the first three occur in the marks table."""


@dataclass(frozen=True)
class WaveTerm:
    """A wave of the venous trace. `is_peak` is False for a nadir or a foot."""

    key: str
    is_peak: bool
    color: str
    meaning: str


@dataclass(frozen=True)
class SpanTerm:
    """A stretch of a channel. `unusable` stretches carry no marks and get ``BAD_`` in front of their text."""

    key: str
    unusable: bool
    meaning: str


@dataclass(frozen=True)
class RhythmTerm:
    """A rhythm and its WFDB rhythm string; ``""`` where there is none, and for what does not begin a stretch."""

    key: str
    wfdb: str
    meaning: str


# Colours: Okabe and Ito's palette, readable with any colour vision.
WAVES: dict[str, WaveTerm] = {
    wave.key: wave
    for wave in (
        WaveTerm("a", True, "#D55E00", "peak of the atrial-contraction wave"),
        WaveTerm("z", False, "#7A7A7A", "reading point at the base of c"),
        WaveTerm("c", True, "#E69F00", "peak of the closure wave after R"),
        WaveTerm("x", False, "#0072B2", "systolic nadir, the deepest point between c (or R) and v"),
        WaveTerm("v", True, "#009E73", "peak of the filling wave of late systole"),
        WaveTerm("y", False, "#56B4E9", "nadir of early diastole after v"),
        WaveTerm("h", True, "#CC79A7", "plateau or small wave of mid-diastole"),
    )
}
"""The waves in their order within one beat of sinus rhythm."""

SPANS: dict[str, SpanTerm] = {
    span.key: span
    for span in (
        SpanTerm("gap", True, "nothing was recorded"),
        SpanTerm("flat", True, "the trace does not move"),
        SpanTerm("clipped", True, "the trace stands at a limit of the recorder"),
        SpanTerm("disconnected", True, "no body pressure on the line: zero, or a level no vein has, without a pulse"),
        SpanTerm("implausible", True, "values that no venous pressure takes, or a change no vein makes"),
        SpanTerm("noise", True, "movement, handling or interference larger than the pulse"),
        SpanTerm("flush", True, "the line is flushed from the pressure bag, and rings after it"),
        SpanTerm("zeroing", True, "the transducer is open to air to set its zero"),
        SpanTerm("sampling", True, "blood is drawn, or the line is closed for it"),
        SpanTerm("damped", True, "the line passes the mean but not the waves"),
        SpanTerm("level_change", False, "the transducer or the patient was moved up or down"),
        SpanTerm("drift", False, "the zero wanders"),
    )
}
"""Kinds of span: the first six are what the quality stage tells apart today, the others what recordings with known truth hold."""


RHYTHMS: dict[str, RhythmTerm] = {
    rhythm.key: rhythm
    for rhythm in (
        RhythmTerm("unknown", "", "neither intervals nor P nor a waves say"),
        RhythmTerm("sinus", "(N", "a P before each R"),
        RhythmTerm("tachycardia", "(N", "regular and fast, with a P or an a before each R: a fast sinus rhythm, as far as one lead shows"),
        RhythmTerm("fibrillation", "(AFIB", "irregular, without P and without a"),
        RhythmTerm("dissociation", "(B3", "P waves at a pace of their own"),
        RhythmTerm("junctional", "(NOD", "regular, without P before R"),
        RhythmTerm("paced", "(P", "pacing spikes before R, without conducted P"),
        RhythmTerm("ectopic", "", "a single early beat within a rhythm"),
    )
}
"""Rhythms of a beat. ``(N``, ``(AFIB``, ``(NOD`` and ``(P`` are rhythm strings of the MIT-BIH Arrhythmia Database; ``(B3`` is
that of the European ST-T Database for complete block (from memory)."""


def mark_text(wave: str) -> str:
    """Annotation text of a mark: ``mark_text("a") == "CVP/a"``."""
    return f"CVP/{WAVES[wave].key}"


def span_text(kind: str, role: str = "cvp") -> str:
    """Annotation text of a span, with ``BAD_`` where the stretch is unusable: ``BAD_CVP/flat``."""
    term = SPANS.get(kind)
    return f"{'BAD_' if term is None or term.unusable else ''}{role.upper()}/{kind}"


def rhythm_text(rhythm: str) -> str:
    """Annotation text of a stretch of one rhythm: ``RHYTHM/sinus``."""
    return f"RHYTHM/{RHYTHMS[rhythm].key}"


def parse_text(text: str) -> tuple[str, str, str] | None:
    """What one of our texts says: ``("mark", "cvp", "a")``, ``("span", "cvp", "flat")``, ``("rhythm", "", "sinus")``; None for others'."""
    role, slash, key = text.removeprefix("BAD_").partition("/")
    if not slash or role != role.upper():
        return None
    if role == "RHYTHM" and key in RHYTHMS and text == rhythm_text(key):
        return "rhythm", "", key
    if role == "CVP" and key in WAVES and not text.startswith("BAD_"):
        return "mark", "cvp", key
    return ("span", role.lower(), key) if key in SPANS else None
