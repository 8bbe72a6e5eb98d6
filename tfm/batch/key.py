"""The resume key: what a field's numbers depend on, and nothing else.

Key = SHA-256 of the input files' contents, the resolved settings, the sheet's values that enter the computation, and an
explicit algorithm version. File times, places, the order of the rows and the number of workers are not part of it.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from tfm.batch.atomic import file_sha256

__all__ = ["ALGORITHM_VERSION", "changes", "key_of", "key_parts"]

#: To be raised with every change that alters a number in a table.
ALGORITHM_VERSION = "1"


def key_parts(files: Mapping[str, Path], settings: Mapping[str, Any], values: Mapping[str, Any]) -> dict[str, Any]:
    """Everything that the key is made of, readable in the field's record.

    Parameters
    ----------
    files
        Input files by their role (``stressed``, ``relaxed``, ``outline``, ...); their contents are hashed.
    settings
        Resolved settings of the run.
    values
        Values of the row that enter the computation, in SI units.
    """
    return {
        "algorithm": ALGORITHM_VERSION,
        "inputs": {role: file_sha256(path) for role, path in sorted(files.items())},
        "settings": dict(sorted(settings.items())),
        "sheet": dict(sorted(values.items())),
    }


def key_of(parts: Mapping[str, Any]) -> str:
    """SHA-256 of the parts in a canonical form.

    Examples
    --------
    >>> key_of({"a": 1, "b": 2}) == key_of({"b": 2, "a": 1})
    True
    """
    return hashlib.sha256(json.dumps(parts, sort_keys=True, separators=(",", ":")).encode()).hexdigest()


def changes(old: Mapping[str, Any], new: Mapping[str, Any]) -> list[str]:
    """What differs between the parts of two keys, in words.

    Examples
    --------
    >>> changes({"sheet": {"poisson": 0.4}}, {"sheet": {"poisson": 0.45}})
    ['sheet value poisson: 0.4 -> 0.45']
    """
    words = {"inputs": "input file", "settings": "setting", "sheet": "sheet value"}
    found = []
    if old.get("algorithm") != new.get("algorithm"):
        found.append(f"algorithm version: {old.get('algorithm')} -> {new.get('algorithm')}")
    for group, word in words.items():
        before, after = old.get(group) or {}, new.get(group) or {}
        for name in sorted(before.keys() | after.keys()):
            if before.get(name) == after.get(name):
                continue
            if group != "inputs":
                found.append(f"{word} {name}: {before.get(name, 'none')} -> {after.get(name, 'none')}")
            elif name in before and name in after:
                found.append(f"{word} {name}: its content changed")
            else:
                found.append(f"{word} {name}: {'added' if name in after else 'removed'}")
    return found
