"""File names for fields: what a user types never becomes a path unescaped."""

from __future__ import annotations

import hashlib
import unicodedata
from collections import Counter
from collections.abc import Iterable
from urllib.parse import quote

__all__ = ["file_stems", "safe_stem"]

_LONGEST = 100
_DEVICES = {"con", "prn", "aux", "nul", *(f"{d}{i}" for d in ("com", "lpt") for i in range(10))}


def _hash(name: str) -> str:
    return hashlib.sha256(name.encode("utf-8", "surrogatepass")).hexdigest()[:12]


def safe_stem(name: str) -> str:
    """The name with everything but ASCII letters, digits, ``-``, ``_`` and inner dots percent-escaped.

    Different names give different stems. Names of devices, leading and trailing dots, and great lengths are dealt with.

    Examples
    --------
    >>> safe_stem("tendon_2kPa-01"), safe_stem("../a b"), safe_stem("con")
    ('tendon_2kPa-01', '%2E.%2Fa%20b', '%63on')
    """
    stem = quote(unicodedata.normalize("NFC", name), safe="").replace("~", "%7E")
    if stem.startswith("."):
        stem = "%2E" + stem[1:]
    if stem.endswith("."):
        stem = stem[:-1] + "%2E"
    if stem.split(".")[0].lower() in _DEVICES:
        stem = f"%{ord(stem[0]):02X}{stem[1:]}"
    if len(stem) > _LONGEST:
        stem = f"{stem[: _LONGEST - 13].rsplit('%', 1)[0]}~{_hash(name)}"
    return stem


def file_stems(names: Iterable[str]) -> dict[str, str]:
    """File stems of all fields of a sheet; names that differ in case only are told apart by a hash.

    Examples
    --------
    >>> file_stems(["a", "b"])
    {'a': 'a', 'b': 'b'}
    >>> sorted(file_stems(["A", "a"]).values())[0].startswith("A~")
    True
    """
    stems = {name: safe_stem(name) for name in names}
    seen = Counter(stem.casefold() for stem in stems.values())
    return {name: stem if seen[stem.casefold()] == 1 else f"{stem}~{_hash(name)}" for name, stem in stems.items()}
