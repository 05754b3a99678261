"""`humbell run`."""

import os
from pathlib import Path

from humbell.app import log
from humbell.app.run import run as run_service
from humbell.config import load


def run(config: Path) -> int:
    """
    Run the service in the foreground and return its exit code.

    Raises:
        ConfigError: *config* cannot be used.

        JournalError: there can be no journal.
    """
    loaded = load(config)
    log.configure()
    code = run_service(loaded)
    if code:
        # A thread that hangs must not hold the process: whatever waits in it is lost, and was told as not clean.
        os._exit(code)
    return code
