"""A command of the bureau's own, called for a verdict."""

from __future__ import annotations

import subprocess
from collections.abc import Sequence

from moire.outcome import Outcome

LIMIT_S = 60.0


def call_out(arguments: Sequence[str], outcome: Outcome) -> str:
    """Call a program for an outcome and wait for it.

    Parameters
    ----------
    arguments : sequence of str
        Program and arguments, with ``{path}``, ``{file}``, ``{verdict}``, ``{visibility}``
        filled in. No shell reads them, so that no file name can become a command.
    outcome : Outcome

    Returns
    -------
    str
        Why the call failed, or ''.
    """
    values = {
        "{path}": outcome.path,
        "{file}": outcome.file,
        "{verdict}": outcome.verdict,
        "{visibility}": f"{outcome.visibility:.3g}",
    }
    filled = [_filled(argument, values) for argument in arguments]
    try:
        done = subprocess.run(
            filled, stdin=subprocess.DEVNULL, stdout=subprocess.DEVNULL, stderr=subprocess.PIPE,
            timeout=LIMIT_S, check=False,
        )  # fmt: skip
    except subprocess.TimeoutExpired:
        return f"{filled[0]} took longer than {LIMIT_S:g} s"
    except (OSError, ValueError) as error:
        return f"{filled[0]} cannot be called: {getattr(error, 'strerror', None) or error}"
    if done.returncode == 0:
        return ""
    said = done.stderr.decode(errors="replace").strip().splitlines()
    return f"{filled[0]} ended with {done.returncode}" + (f": {said[-1]}" if said else "")


def _filled(argument: str, values: dict[str, str]) -> str:
    # Piece by piece: a file named "{verdict}.png" must not be filled in again.
    for name, value in values.items():
        before, found, after = argument.partition(name)
        if found:
            return _filled(before, values) + value + _filled(after, values)
    return argument
