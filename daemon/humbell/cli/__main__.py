"""Lets `python -m humbell.cli` be the command line."""

from humbell.cli.main import main

main()
