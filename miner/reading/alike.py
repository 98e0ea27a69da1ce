"""Names that are not equal and yet look so: by case, blanks or Unicode form."""

from __future__ import annotations

import unicodedata
from collections.abc import Iterable


def folded(name: str) -> str:
    """Return what names that look alike have in common."""
    joined = " ".join(unicodedata.normalize("NFKC", name).casefold().split())
    return unicodedata.normalize("NFKC", joined)


def alike(names: Iterable[str]) -> list[tuple[str, ...]]:
    """Return the groups of two and more different names that look alike, sorted."""
    groups: dict[str, set[str]] = {}
    for name in names:
        groups.setdefault(folded(name), set()).add(name)
    return sorted(tuple(sorted(group)) for group in groups.values() if len(group) > 1)


def quoted(name: str, longest: int = 60) -> str:
    """Return a name in quotes, what cannot be seen in it spelled out, cut if it is long."""
    cut = name if len(name) <= longest else name[: longest - 3] + "..."
    is_plain = cut.isprintable() and cut.isascii() and cut == " ".join(cut.split())
    return f'"{cut}"' if is_plain else ascii(cut)
