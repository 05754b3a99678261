"""What the commands that ask a running service share."""

import getpass
import json
import sys
from collections.abc import Mapping
from datetime import datetime
from pathlib import Path
from typing import Any

from humbell.app.control import ask, socket_path
from humbell.config import Loaded, load
from humbell.model import ConfigError, OutOfReachError


def ask_or_none(loaded: Loaded, request: Mapping[str, Any]) -> Mapping[str, Any] | None:
    """Return the running service's answer; None, and a line on standard error, where none runs."""
    try:
        return ask(socket_path(loaded.site.journal.path), request)
    except OutOfReachError as error:
        print(f"{error}; what follows is from the journal", file=sys.stderr)
        return None


def read(config: Path) -> Loaded:
    """
    Read the configuration, which says where the service and its journal are.

    Raises:
        ConfigError: it cannot be used.
    """
    return load(config)


def user() -> str:
    """Return who asks, as the computer knows him."""
    return getpass.getuser()


def print_json(value: object) -> None:
    """Print *value* as one JSON document."""
    print(json.dumps(value, indent=2, ensure_ascii=False))


def time_ns(option: str, text: str) -> int:
    """
    Return a time with a zone, as given on the command line, as UTC ns since 1970.

    Raises:
        ConfigError: it is none, or has no zone.
    """
    try:
        time = datetime.fromisoformat(text)
    except ValueError:
        raise ConfigError(f"{option} {text}: is no time (give one such as 2026-03-01T10:00:00Z)") from None
    if time.tzinfo is None:
        raise ConfigError(f"{option} {text}: has no zone (add Z for UTC, or an offset such as +01:00)")
    seconds = int(time.replace(microsecond=0).timestamp())
    return (seconds * 1_000_000 + time.microsecond) * 1000
