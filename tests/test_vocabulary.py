"""The one table of terms: every text parses back, and our texts are nobody else's."""

from __future__ import annotations

import re

import pytest

from caval import tables, vocabulary
from caval.vocabulary import SPANS, WAVES, mark_text, parse_text, span_text


@pytest.mark.parametrize("wave", WAVES)
def test_a_mark_reads_back(wave: str) -> None:
    assert mark_text(wave) == f"CVP/{wave}"
    assert parse_text(mark_text(wave)) == ("mark", "cvp", wave)


@pytest.mark.parametrize("kind", SPANS)
@pytest.mark.parametrize("role", ["cvp", "ecg", "abp"])
def test_a_span_reads_back_and_bad_says_unusable(kind: str, role: str) -> None:
    text = span_text(kind, role)
    assert parse_text(text) == ("span", role, kind)
    assert text.startswith("BAD_") == SPANS[kind].unusable  # what MNE looks for


OTHERS = ["", "a", "x", "N", "CVP", "CVP/", "CVP/q", "cvp/a", "ABP/a", "BAD_CVP/a", "Lights off", "CVP/a begin", "/"]


@pytest.mark.parametrize("text", OTHERS)
def test_other_peoples_texts_are_left_alone(text: str) -> None:
    assert parse_text(text) is None


def test_an_unknown_wave_is_refused() -> None:
    with pytest.raises(KeyError):
        mark_text("q")


def test_texts_fit_the_formats() -> None:
    """ASCII, and no longer than the 40 characters some EDF+ readers keep."""
    texts = [mark_text(w) for w in WAVES] + [span_text(k, r) for k in SPANS for r in ("cvp", "pleth")]
    assert all(t.isascii() and len(t) <= 40 for t in texts)
    assert len(set(texts)) == len(texts)


def test_waves_stand_in_the_order_of_one_beat_and_alternate() -> None:
    """In sinus rhythm a, z, c, x, v, y, h: peaks and the nadirs between them."""
    assert list(WAVES) == ["a", "z", "c", "x", "v", "y", "h"]
    assert [WAVES[w].is_peak for w in WAVES] == [True, False] * 3 + [True]


def test_colours_are_told_apart() -> None:
    colors = [w.color for w in WAVES.values()]
    assert len(set(colors)) == len(colors)
    assert all(re.fullmatch(r"#[0-9A-F]{6}", c) for c in colors)


def test_columns_of_the_beat_table_come_from_the_vocabulary() -> None:
    for wave in WAVES:
        assert {f"{wave}_time_s", f"{wave}_mmhg", f"{wave}_state"} <= set(tables.BEAT_COLUMNS)
    assert vocabulary.STATES[:3] == ("clear", "fused", "weak")
