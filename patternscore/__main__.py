"""Runs the command: ``python -m patternscore``."""

from patternscore.cli import main

main()
