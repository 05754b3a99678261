"""The one form of all messages about a configuration file: where, what, and what to do."""

import difflib
from collections.abc import Iterable

Path = tuple[str | int, ...]

_SHOWN = 60  # characters of a value in a message: enough to find it again, and the line stays readable


def path_text(path: Path) -> str:
    """Return *path* as messages show it, such as ``machines.p-101.points.de-h.velocity.band_hz[0]``."""
    text = ""
    for part in path:
        if isinstance(part, int):
            text += f"[{part}]"
        else:
            text += ("." if text else "") + (part if part and part.isprintable() else repr(part))
    return text


def problem(name: str, line: int, path: Path, text: str) -> str:
    """Return one problem as a line: ``FILE:LINE: path.to.key: what is wrong (what to do)``."""
    return f"{name}:{line}: {path_text(path)}: {text}" if path else f"{name}:{line}: {text}"


def shown(value: object) -> str:
    """Return *value* as messages show it: on one line, and shortened."""
    if isinstance(value, dict | list):
        return "a mapping" if isinstance(value, dict) else "a list"
    if value is None:
        return "nothing"
    text = repr(value) if isinstance(value, str) else str(value)
    if isinstance(value, bool):
        text = text.lower()
    return text if len(text) <= _SHOWN else f"{text[: _SHOWN - 1]}…"


def known(word: str, words: Iterable[str]) -> str:
    """Return the advice for a *word* that is none of *words*: the closest one, if any is close, and all."""
    words = list(dict.fromkeys(words))
    close = difflib.get_close_matches(word, words, n=1)
    return (f"did you mean '{close[0]}'? " if close else "") + "known: " + (", ".join(words) or "none")
