"""Annotation tracks, a column a field: never a Python object a mark."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from caval import vocabulary
from caval.errors import InputError

__all__ = ["Track"]

_BEAT_SYMBOLS = frozenset("NLRBAaJSVrFejnE/fQ?")
_BEAT_TEXTS = frozenset({"R", "QRS", "beat"}) | _BEAT_SYMBOLS


@dataclass(frozen=True, eq=False)
class Track:
    """Marks and spans in time order as equal-length columns.

    Attributes
    ----------
    onset_s : float64 array, shape (n,)
        Seconds from the start of the record; may lie before 0 or after its end.
    duration_s : float64 array, shape (n,)
        0 for an instant.
    code : int32 array, shape (n,)
        Index into `texts`.
    texts : tuple of str
        The distinct annotation texts.
    channel : int32 array, shape (n,)
        Index of the channel the annotation belongs to, -1 for the whole record.
    extra : mapping of str to array, shape (n,)
        What a format holds beyond this (WFDB: ``symbol``, ``subtype``, ``num``), so that it can travel back.
    """

    onset_s: NDArray[np.float64]
    duration_s: NDArray[np.float64]
    code: NDArray[np.int32]
    texts: tuple[str, ...]
    channel: NDArray[np.int32]
    extra: Mapping[str, NDArray] = field(default_factory=dict)

    def __post_init__(self) -> None:
        columns: list[NDArray] = [self.onset_s, self.duration_s, self.code, self.channel, *self.extra.values()]
        lengths = {len(column) for column in columns}
        if len(lengths) != 1:
            raise InputError(f"columns of a track must have one length, not {sorted(lengths)}")

    def __len__(self) -> int:
        return len(self.onset_s)

    @classmethod
    def empty(cls) -> Track:
        return cls.build([], [])

    @classmethod
    def build(
        cls,
        onset_s: Iterable[float],
        text: Sequence[str] | NDArray,
        *,
        duration_s: Iterable[float] | float = 0.0,
        channel: Iterable[int] | int = -1,
        extra: Mapping[str, NDArray] | None = None,
    ) -> Track:
        """A track from columns in any order; rows are sorted by onset (stable).

        Raises
        ------
        InputError
            Columns of different lengths.
        """
        onset = np.asarray(list(onset_s) if not isinstance(onset_s, np.ndarray) else onset_s, dtype=np.float64)
        n = len(onset)
        if len(text) != n:
            raise InputError(f"a track needs one text an onset: {n} onsets, {len(text)} texts")
        code, texts = pd.factorize(np.asarray(text, dtype=object)) if n else (np.empty(0, int), [])
        order = np.argsort(onset, kind="stable")
        return cls(
            onset[order],
            np.broadcast_to(np.asarray(duration_s, dtype=np.float64), (n,))[order],
            code.astype(np.int32)[order],
            tuple(str(t) for t in texts),
            np.broadcast_to(np.asarray(channel, dtype=np.int32), (n,))[order],
            {k: np.asarray(v)[order] for k, v in (extra or {}).items()},
        )

    @property
    def text(self) -> NDArray[np.object_]:
        """The text of every annotation, shape (n,)."""
        return np.asarray([*self.texts, ""], dtype=object)[self.code]

    def take(self, index: NDArray) -> Track:
        """The annotations at `index` (integers or a boolean mask)."""
        return Track(
            self.onset_s[index], self.duration_s[index], self.code[index], self.texts, self.channel[index],
            {k: v[index] for k, v in self.extra.items()},
        )

    def join(self, other: Track) -> Track:
        """Both tracks in one, in time order. Extra columns that one of them lacks are dropped from neither: gaps are empty."""
        if not len(other):
            return self
        if not len(self):
            return other
        extra = {}
        for key in [*self.extra, *(k for k in other.extra if k not in self.extra)]:
            template = self.extra.get(key, other.extra.get(key))
            assert template is not None
            blank = np.zeros(1, template.dtype) if template.dtype != object else np.array([""], dtype=object)
            parts = [t.extra.get(key, np.repeat(blank, len(t))) for t in (self, other)]
            extra[key] = np.concatenate(parts)
        return Track.build(
            np.concatenate([self.onset_s, other.onset_s]),
            np.concatenate([self.text, other.text]),
            duration_s=np.concatenate([self.duration_s, other.duration_s]),
            channel=np.concatenate([self.channel, other.channel]),
            extra=extra,
        )

    @classmethod
    def from_tables(
        cls,
        marks: pd.DataFrame,
        spans: pd.DataFrame,
        *,
        channels: Mapping[str, int],
        roles: Mapping[str, str],
        rhythms: pd.DataFrame | None = None,
    ) -> Track:
        """The track of our own marks, spans and rhythms.

        Parameters
        ----------
        marks, spans
            The tables of the contract (``time_s, mark, …`` and ``onset_s, duration_s, kind, channel, …``).
        channels
            Index of each channel label in the record.
        roles
            Label of the channel that has each role, ``{"cvp": "CVP"}``.
        rhythms
            Stretches of one rhythm, ``onset_s, duration_s, rhythm``.
        """
        role_of = {label: role for role, label in roles.items()}
        text = [vocabulary.mark_text(m) for m in marks["mark"]]
        text += [vocabulary.span_text(k, role_of.get(c, c)) for k, c in zip(spans["kind"], spans["channel"], strict=True)]
        cvp = channels.get(roles.get("cvp", ""), -1)
        ours = cls.build(
            np.concatenate([marks["time_s"].to_numpy(float), spans["onset_s"].to_numpy(float)]),
            text,
            duration_s=np.concatenate([np.zeros(len(marks)), spans["duration_s"].to_numpy(float)]),
            channel=np.concatenate([np.full(len(marks), cvp), [channels.get(c, -1) for c in spans["channel"]]]).astype(np.int32),
        )
        if rhythms is None or not len(rhythms):
            return ours
        words = [vocabulary.rhythm_text(word) for word in rhythms["rhythm"]]
        return ours.join(cls.build(rhythms["onset_s"], words, duration_s=rhythms["duration_s"]))

    def marks(self) -> pd.DataFrame:
        """Our marks in this track: columns ``time_s`` and ``mark``, other people's annotations left out."""
        parsed = [vocabulary.parse_text(t) for t in self.texts]
        keep = np.array([p is not None and p[0] == "mark" for p in parsed] + [False])[self.code]
        key = np.array([p[2] if p else "" for p in parsed] + [""], dtype=object)[self.code]
        return pd.DataFrame({"time_s": self.onset_s[keep], "mark": key[keep]})

    def beat_times_s(self) -> NDArray[np.float64]:
        """Times of beats in this track, seconds, sorted.

        WFDB beat symbols count; without symbols, the texts ``R``, ``QRS``, ``beat`` and the WFDB beat letters; a track in which
        no annotation has a text is a list of beats.

        Raises
        ------
        InputError
            The track holds annotations but no beat.
        """
        if "symbol" in self.extra:
            keep = np.isin(self.extra["symbol"].astype(str), list(_BEAT_SYMBOLS))
        else:
            keep = np.array([t in _BEAT_TEXTS or not t for t in self.texts] + [False])[self.code]
        if len(self) and not keep.any():
            seen = ", ".join(repr(t) for t in self.texts[:6])
            raise InputError(f"no beats among the annotations (seen: {seen}); beats are WFDB beat codes or the text 'R', 'QRS' or 'beat'")
        return np.unique(self.onset_s[keep])
