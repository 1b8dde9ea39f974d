"""Lets ``python -m basinwright`` stand for the command."""

from basinwright.cli import main

main()
