"""Lets ``python -m stackbound`` be the command line."""

from stackbound.cli import main

main()
