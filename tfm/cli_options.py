"""What the commands share: the debug switch, messages, options that are quantities."""

from __future__ import annotations

import os
import sys
from typing import Annotated

import typer

from tfm.errors import InputError, TfmError

__all__ = ["Debug", "choice", "debugging", "one_thread_each", "option_quantity", "say"]

#: Libraries that start threads of their own read these when they are loaded.
_THREADS = (
    "OMP_NUM_THREADS",
    "OPENBLAS_NUM_THREADS",
    "MKL_NUM_THREADS",
    "NUMEXPR_NUM_THREADS",
    "VECLIB_MAXIMUM_THREADS",
)
_state = {"debug": False}


def _set_debug(value: bool) -> bool:
    _state["debug"] = _state["debug"] or value
    return value


def debugging() -> bool:
    """True when ``--debug`` was given."""
    return _state["debug"]


Debug = Annotated[
    bool, typer.Option("--debug", help="Add the traceback to an error.", callback=_set_debug, is_eager=True)
]


def say(text: str) -> None:
    """A message: one line on stderr, at once."""
    sys.stderr.write(text + "\n")
    sys.stderr.flush()


def choice(value: str, allowed: tuple[str, ...], option: str) -> str:
    """``value`` when it is one of ``allowed``.

    Raises
    ------
    InputError
        ``bad-option``.
    """
    if value not in allowed:
        raise InputError(f"{option} '{value}' is not known", code="bad-option", remedy=f"choose {', '.join(allowed)}")
    return value


def option_quantity(text: str, dimension: str, option: str) -> float:
    """An option that is a number with its unit, in SI units; the message names the option.

    Raises
    ------
    InputError
        As :func:`tfm.units.parse_quantity`.
    """
    from tfm.units import parse_quantity

    try:
        return parse_quantity(text, dimension)
    except TfmError as error:
        error.message = f"{option}: {error.message}"
        raise


def one_thread_each() -> None:
    """Ask numeric libraries for one thread per process; to be called before they are loaded.

    Fields are independent, so workers scale better than threads, and results do not depend on the number of either.
    """
    for name in _THREADS:
        os.environ[name] = "1"
