"""The command line: `brimline COMMAND SCENARIO [options]`. Commands are loaded only when they are called."""

from analysis.command.entry import main

__all__ = ["main"]
