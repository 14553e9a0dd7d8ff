"""The command line: one file a command, no logic.

Only light modules are imported here; a command imports its job when it runs, so that `oakum --help`
stays quick.
"""

from oakum.cli.app import app
from oakum.cli.running import main

__all__ = ["app", "main"]
