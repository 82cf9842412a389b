"""The command `branchlab`: its parser loads nothing heavy; a command's module is loaded when it is called."""

import importlib
import sys

from branchlab.cli.arguments import build_parser
from branchlab.errors import BranchlabError

COMMANDS = {"study": "branchlab.cli.study"}


def main(arguments=None) -> int:
    """Run the command line; return the exit code.

    0: done. 1: done, but some realisations failed. 2: what the user gave cannot be used (one message on stderr, no
    traceback). 130: stopped by Ctrl-C. A fault of the program itself ends in a traceback.
    """
    given = build_parser().parse_args(arguments)
    try:
        return importlib.import_module(COMMANDS[given.command]).run(given)
    except BranchlabError as slip:
        print(f"branchlab: {slip}", file=sys.stderr)
        return 2
    except MemoryError as fault:
        print(
            f"branchlab: the memory of this machine is too small: {fault}. Use fewer screens or cells.", file=sys.stderr
        )
        return 2
    except KeyboardInterrupt:
        print("branchlab: stopped before a realisation was finished; nothing is written.", file=sys.stderr)
        return 130
