"""The words nearest to a mistyped one."""

from __future__ import annotations

import difflib
from collections.abc import Iterable


def did_you_mean(got: str, known: Iterable[str]) -> str:
    """Return " (did you mean ...?)" with at most three of the known words, or nothing where none is near."""
    folded = {word.casefold(): word for word in known}
    near = difflib.get_close_matches(got.casefold(), list(folded), n=3, cutoff=0.6)
    return f" (did you mean {' or '.join(folded[word] for word in near)}?)" if near else ""
