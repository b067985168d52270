"""`python -m scheduler` is the `foldwright` command."""

from scheduler.cli import run

run()
