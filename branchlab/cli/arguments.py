"""The options of the command `branchlab`."""

import argparse

from branchlab import __version__
from branchlab.errors import suggestion

STUDY = """\
Run a study: rays, wave and semiclassical sum through several realisations of a medium, at several wavelengths. It
ends with the verdict (how far rays may stand in for the wave, and what goes wrong beyond), a netCDF file with
everything, and a figure.

Without a file the embedded study runs: ultrasound through a gel block, with invented data.
"""
EXAMPLES = """\
examples:
  branchlab study
  branchlab study --write-default mine.json     write the embedded study, to be edited; then:
  branchlab study mine.json
  branchlab study --medium gel.nc --variable c --kind speed --reference 1500 --wavelength 1.5 0.75
"""


class Parser(argparse.ArgumentParser):
    """A parser that suggests the option that was meant."""

    def error(self, message):
        """Print one message, with a suggestion for a misspelt option, and exit with code 2."""
        marker = "unrecognized arguments: "
        if message.startswith(marker):
            unknown = message.removeprefix(marker).split()
            first = next((one for one in unknown if one.startswith("-")), unknown[0]).split("=")[0]
            message = f"{first!r} is not known.{suggestion(first, self._options())}"
        self.exit(2, f"{self.prog}: {message} See {self.prog} --help.\n")

    def _options(self) -> list[str]:
        """Return every option of the parser and of its commands (those report what they do not know up here)."""
        own = [option for action in self._actions for option in action.option_strings]
        commands = [action.choices for action in self._actions if isinstance(action.choices, dict)]
        return own + [option for some in commands for parser in some.values() for option in parser._options()]


def build_parser() -> Parser:
    """Return the parser of the command line."""
    parser = Parser(
        prog="branchlab",
        allow_abbrev=False,
        description="Where ray density may stand in for wave intensity in a weakly disordered medium, and where not.",
    )
    parser.add_argument("--version", action="version", version=f"branchlab {__version__}")
    commands = parser.add_subparsers(dest="command", required=True, metavar="COMMAND")
    study = commands.add_parser(
        "study",
        allow_abbrev=False,
        help="run a study to the verdict",
        description=STUDY,
        epilog=EXAMPLES,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    _add_study(study)
    return parser


def _add_study(study: Parser) -> None:
    """Add the options of `branchlab study`."""
    study.add_argument("study_file", nargs="?", metavar="STUDY.json", help="a study to run instead of the embedded one")
    own = study.add_argument_group("your own medium")
    own.add_argument("--medium", metavar="FILE.nc", help="netCDF file with samples on an even grid")
    own.add_argument("--variable", metavar="NAME", help="variable of that file")
    own.add_argument(
        "--kind", metavar="KIND", help="what it holds: v (= 1 - n**2), index, speed, or depth (shallow water)"
    )
    own.add_argument(
        "--reference",
        metavar="R",
        help="index, speed or depth where v = 0; wavelengths are told there (default: the mean)",
    )
    own.add_argument("--along", metavar="NAME", help="dimension along the way of the wave (default: x)")
    own.add_argument("--across", metavar="NAME", help="dimension across it (default: y)")
    own.add_argument("--width", metavar="W", help="width of the window (default: all that the samples allow)")
    own.add_argument("--sides", metavar="SIDES", help="periodic or absorbing (default: periodic)")
    what = study.add_argument_group("what is studied (lengths in the unit of the study or of the file's axes)")
    what.add_argument("--wavelength", nargs="+", metavar="L", help="one or more wavelengths")
    what.add_argument("--bandwidth", metavar="B", help="relative width of the band about each, 0: none (default: 0.4)")
    what.add_argument("--resolution", metavar="D", help="standard deviation of the smoothing of rays and wave")
    what.add_argument("--threshold", metavar="T", help="part of the flux that may be misplaced (default: 0.15)")
    what.add_argument("--length", metavar="X", help="how far the wave is followed")
    what.add_argument(
        "--model",
        metavar="MODEL",
        help="full: full rays and the full wave; paraxial: for small angles, faster (default: what the study says, or full)",
    )
    what.add_argument("--realisations", metavar="N", help="number of realisations of a random medium")
    out = study.add_argument_group("output")
    out.add_argument(
        "--output", metavar="RESULT.nc", help="netCDF file (default: branchlab-study.nc or after the input)"
    )
    out.add_argument("--figure", metavar="RESULT.png", help="figure (default: beside the netCDF file)")
    out.add_argument("--replace", action="store_true", help="replace files that hold another study")
    out.add_argument("--quiet", action="store_true", help="no progress bar; print the verdict only")
    out.add_argument("--write-default", metavar="STUDY.json", help="write the study that would run, and end")
