"""The command line: thin, one function a command.

Takes words from a shell, gives an exit status: 0 done, 1 the work failed or was stopped safely, 2 the input is wrong.
Never knows how anything is done: each command imports the rooms it needs when it is called, so `--help` stays quick.
"""

from runner.commands.app import app, main

__all__ = ["app", "main"]
