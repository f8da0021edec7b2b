"""`python -m service` is the command line."""

from service.cli import run

run()
