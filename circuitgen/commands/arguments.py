"""What commands share: exit codes, checks of arguments, output."""

from __future__ import annotations

import argparse
import math
import sys

FINE, DISAGREES, BAD_INPUT, INTERRUPTED = 0, 1, 2, 130


def _whole_number(text: str, least: int) -> int:
    value = int(text) if text.strip().lstrip("+-").isdigit() else least - 1
    if not least <= value < 2**64:
        raise argparse.ArgumentTypeError(f"{text!r} must be a whole number >= {least}")
    return value


def at_least_one(text: str) -> int:
    """Return a whole number above 0, or refuse the argument."""
    return _whole_number(text, 1)


def not_negative(text: str) -> int:
    """Return a whole number from 0 up, or refuse the argument."""
    return _whole_number(text, 0)


def number(text: str) -> float:
    """Return a finite number, or refuse the argument."""
    try:
        value = float(text)
    except ValueError:
        value = math.nan
    if not math.isfinite(value):
        raise argparse.ArgumentTypeError(f"{text!r} must be a finite number")
    return value


def say(text: str) -> None:
    """Write a line to standard output, with escapes for letters that it lacks."""
    encoding = sys.stdout.encoding or "utf-8"
    known = text.encode(encoding, "backslashreplace").decode(encoding)
    sys.stdout.write(f"{known}\n")
