"""A driver of a third party that does what drivers do on bad days, found through the entry point group."""

from pathlib import Path

_MODULE = """\
import threading
from typing import Literal

from pydantic import BaseModel


class Settings(BaseModel):
    kind: Literal["bad"]
    fails: Literal["create", "open", "read", "hang"]


class Source:
    def __init__(self, name, fails):
        self.name, self.fails = name, fails

    def open(self):
        if self.fails == "open":
            raise OSError("no such device")

    def read(self, timeout_s):
        if self.fails == "hang":
            threading.Event().wait()
        raise ZeroDivisionError("a mistake in the driver")

    def close(self):
        pass


class Plugin:
    settings = Settings

    def create(self, name, settings, monotonic, utc_ns):
        if settings.fails == "create":
            raise KeyError("serial number")
        return Source(name, settings.fails)


plugin = Plugin()
"""


def bad_drivers(folder: Path) -> dict[str, str]:
    """
    Install one of kind ``bad``, and one that cannot even be imported.

    Returns:
        What the environment of a process has to say for it to find them.
    """
    information = folder / "bad-1.dist-info"
    information.mkdir(parents=True)
    (folder / "bad.py").write_text(_MODULE)
    (folder / "worse.py").write_text("raise ImportError('a library is missing')\n")
    (information / "METADATA").write_text("Metadata-Version: 2.1\nName: bad\nVersion: 1\n")
    (information / "entry_points.txt").write_text("[humbell.sources]\nbad = bad:plugin\nworse = worse:plugin\n")
    return {"PYTHONPATH": str(folder)}
