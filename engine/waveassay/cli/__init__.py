"""The command line: parse, call, print, choose an exit code."""

from waveassay.cli.main import main

__all__ = ["main"]
