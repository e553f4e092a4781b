"""Names at the door: which words of a file name or a mark may be kept.

A file name is kept when it is made of register codes, numbers and punctuation; anything else might name a person.
"""

from __future__ import annotations

import re
from collections.abc import Collection
from functools import lru_cache
from pathlib import PurePosixPath

_SUFFIXES = (
    ".edf", ".bdf", ".rec", ".hea", ".dat", ".atr", ".qrs", ".ecg", ".csv", ".tsv", ".txt", ".parquet", ".xml",
    ".dcm", ".zip", ".gz",
)  # fmt: skip
_PLAIN = re.compile(r"[\w ./+=@,()-]*")
_NUMBER = re.compile(r"[a-z]?\d+(t\d+z?)?[a-z]?")


def shown_name(name: str, delivery_id: str, codes: Collection[str]) -> str:
    """The delivered name when it is made of codes and numbers only, else its longest code and the delivery's own."""
    path = PurePosixPath(name)
    kept = [suffix for suffix in path.suffixes if suffix.casefold() in _SUFFIXES]
    suffix = "".join(kept)
    stem = str(path)[: len(str(path)) - len(suffix)] if suffix and str(path).endswith(suffix) else str(path)
    known = _words_of(frozenset(codes))
    if _PLAIN.fullmatch(name) and all(word in known or _NUMBER.fullmatch(word) for word in _words(stem)):
        return name
    return f"{_longest_code_in(stem, codes) or 'delivery'}-{delivery_id[:8]}{suffix}"


def _longest_code_in(text: str, codes: Collection[str]) -> str | None:
    """The longest code that stands in a text with no letter or digit around it and is safe as a file name."""
    safe = (code for code in codes if re.fullmatch(r"[\w.+=-]+", code))
    inside = [code for code in safe if re.search(rf"(?<![^\W_]){re.escape(code)}(?![^\W_])", text)]
    return max(inside, key=lambda code: (len(code), code), default=None)


def _words(text: str) -> list[str]:
    return [word for word in re.split(r"[\W_]+", text.casefold()) if word]


@lru_cache(maxsize=8)
def _words_of(codes: frozenset[str]) -> frozenset[str]:
    """Words of the codes, and the codes without their punctuation."""
    return frozenset(word for code in codes for word in [*_words(code), "".join(_words(code))])


def without_words(text: str, words: Collection[str]) -> str:
    """The text with every word of three letters or more that stands among `words` replaced by a dash."""
    dropped = {word for each in words for word in _words(each) if len(word) >= 3}
    return re.sub(r"[^\W_]+", lambda found: "—" if found[0].casefold() in dropped else found[0], text)


def shown_serial(words: Collection[str]) -> str:
    """The first word that looks like a serial (it has a digit), for a message; names have none."""
    return next((word for word in words if re.search(r"\d", word) and len(word) <= 32), "not told")
