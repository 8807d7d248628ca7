"""What a user is told, on standard error: one sentence a line."""

from __future__ import annotations

import re
import shutil
import sys
import textwrap
from collections.abc import Mapping, Sequence

from thermo.arguments import brief
from thermo.process import drop


def say(sentence: str) -> None:
    # One sentence, whatever a library put into its message: one line, wrapped only for eyes.
    line = "partita: " + " ".join(sentence.split())
    line = re.sub(r"\S{301,}", lambda long: brief(long[0], 300), line)
    if sys.stderr.isatty():
        width = shutil.get_terminal_size().columns
        line = textwrap.fill(line, width, subsequent_indent="  ", break_on_hyphens=False)
    try:
        print(line, file=sys.stderr, flush=True)
    except OSError:  # the terminal was closed, or the disk behind 2>file is full
        drop(sys.stderr)


def note(sentence: str) -> None:
    say("note: " + sentence)


def tell_notes(notes: Sequence[str]) -> None:
    for sentence in notes:
        note(sentence)


def confirm(sentence: str) -> None:
    """Tell someone who watches what was done; a script needs only the exit code."""
    if sys.stderr.isatty():
        say(sentence)


def tell_attributes(attrs: Mapping[str, object]) -> None:
    """What a result says against itself, or why it lacks something."""
    leads = {
        "unavailable": "no susceptibility and magnetization: ",
        "error_unavailable": "no error bars: ",
        "caution": "",
    }
    for name, lead in leads.items():
        if name in attrs:
            note(f"{lead}{attrs[name]}")
