"""Words of problems, reactions and drug classes, where no code helps. Whole words only; doubt means no match."""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Iterable, Mapping, Sequence

from cds.fhir.codings import words_of

_FILLERS = frozenset({"disorder", "finding", "nos", "unspecified"})
_NEGATIONS = frozenset({"no", "not", "without", "denies", "denied", "never", "negative", "nil", "none", "non"})


class Phrases:
    """Phrases and what they mean. Asked in two ways: the whole text is one, or it holds some."""

    __slots__ = ("_by_first", "_whole")

    def __init__(self, phrases: Iterable[tuple[str, tuple[str, ...]]] = ()) -> None:
        whole: dict[tuple[str, ...], tuple[str, ...]] = {}
        for phrase, meaning in phrases:
            whole[tuple(words_of(phrase))] = meaning
        by_first: dict[str, list[tuple[str, ...]]] = defaultdict(list)
        for words in sorted(whole, key=len, reverse=True):
            by_first[words[0]].append(words)
        self._whole: Mapping[tuple[str, ...], tuple[str, ...]] = whole
        self._by_first: Mapping[str, Sequence[tuple[str, ...]]] = dict(by_first)

    def whole(self, text: str) -> tuple[str, ...]:
        """The meaning of a text that is one of the phrases and nothing else, so no negation can hide in it."""
        return self._whole.get(tuple(word for word in words_of(text) if word not in _FILLERS), ())

    def held(self, text: str) -> tuple[str, ...]:
        """The meanings of all phrases in the text, longest first, each once; none if the text denies anything."""
        words = words_of(text)
        if not _NEGATIONS.isdisjoint(words):
            return ()
        found: dict[str, None] = {}
        place = 0
        while place < len(words):
            phrase = self._longest_at(words, place)
            found |= dict.fromkeys(self._whole.get(phrase, ()))
            place += max(1, len(phrase))
        return tuple(found)

    def _longest_at(self, words: Sequence[str], place: int) -> tuple[str, ...]:
        for phrase in self._by_first.get(words[place], ()):
            if tuple(words[place : place + len(phrase)]) == phrase:
                return phrase
        return ()
