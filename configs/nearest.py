"""The words nearest to a mistyped one."""

from __future__ import annotations

import difflib
from collections.abc import Iterable, Mapping

MOST_SHOWN = 3
SMALLEST_LIKENESS = 0.6  # of difflib: 1 is equal
LESS_LIKE = 0.08  # a word that is less like by more than this than the nearest one is not shown


def did_you_mean(got: str, known: Iterable[str] | Mapping[str, str]) -> str:
    """Return " (did you mean ...?)" with at most three of the known words, or nothing where none is near.

    Args:
        got: the word as typed.
        known: the words that are allowed; a mapping gives, for each, the word to show instead.
    """
    meant = known if isinstance(known, Mapping) else {word: word for word in known}
    folded = {word.casefold(): shown for word, shown in meant.items()}
    typed = got.casefold()
    near = difflib.get_close_matches(typed, list(folded), n=2 * MOST_SHOWN, cutoff=SMALLEST_LIKENESS)
    likeness = [difflib.SequenceMatcher(None, word, typed).ratio() for word in near]
    near = [word for word, like in zip(near, likeness, strict=True) if like >= likeness[0] - LESS_LIKE]
    shown = list(dict.fromkeys(folded[word] for word in near))[:MOST_SHOWN]
    return f" (did you mean {' or '.join(shown)}?)" if shown else ""
