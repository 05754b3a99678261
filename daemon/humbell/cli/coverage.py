"""`humbell coverage`."""

from pathlib import Path

from humbell.cli.ask import print_json, read, time_ns
from humbell.journal import open_for_reading, totals


def run(config: Path, start: str | None, end: str | None, *, as_json: bool) -> int:
    """
    Print what the committed seconds of each point were.

    Raises:
        ConfigError: *config* or a time cannot be used.

        JournalError: there is no journal to read.
    """
    loaded = read(config)
    start_ns = 0 if start is None else time_ns("--from", start)
    end_ns = 2**63 - 1 if end is None else time_ns("--to", end)
    with open_for_reading(loaded.site.journal.path) as journal:
        found = totals(journal, start_ns, end_ns)
    if as_json:
        print_json(
            [
                {
                    "machine": name.machine,
                    "point": name.point,
                    "seconds": {category: round(entry.seconds, 3) for category, entry in accounts.items()},
                    "judged_s": round(sum(entry.judged_s for entry in accounts.values()), 3),
                    "unsure_clock_s": round(sum(entry.unsure_s for entry in accounts.values()), 3),
                }
                for name, accounts in found.items()
            ]
        )
        return 0
    for name, accounts in found.items():
        whole = sum(entry.seconds for entry in accounts.values())
        parts = ", ".join(
            f"{category} {entry.seconds:.0f} s ({100 * entry.seconds / whole:.2f} %)"
            for category, entry in accounts.items()
        )
        print(f"{name}: {parts}; judged by a limit {sum(entry.judged_s for entry in accounts.values()):.0f} s")
    return 0
