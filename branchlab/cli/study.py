"""The command `branchlab study`: from options to the verdict, the netCDF file and the figure."""

import pathlib
import shutil
import sys
import textwrap
import time
import warnings

from tqdm import tqdm

from branchlab.cli.files import check_target, partial
from branchlab.conventions import with_caution
from branchlab.errors import BranchlabWarning, InputError, check_integer, check_number, check_positive
from branchlab.launch import Band
from branchlab.media import SampledMedium
from branchlab.page import draw_study
from branchlab.results import save
from branchlab.studies import Study, default_study, own_study, table
from branchlab.studies.own import BANDWIDTH, CAUTIONS

NEEDS_MEDIUM = ("variable", "kind", "reference", "along", "across", "width", "sides")


def run(given) -> int:
    """Run the command; return the exit code.

    Parameters
    ----------
    given : argparse.Namespace
        As the parser gives it.
    """
    study = chosen_study(given)
    if given.write_default is not None:
        return _write(study, pathlib.Path(given.write_default), given.replace)
    target = pathlib.Path(given.output or f"{_stem(given)}.nc")
    figure = pathlib.Path(given.figure) if given.figure else target.with_suffix(".png")
    for path, ending in ((target, ".nc"), (figure, ".png")):
        check_target(path, ending, study, replace=given.replace)
    if not given.quiet:
        print(_opening(study), flush=True)
    start = time.monotonic()
    result, remarks = _run(study, quiet=given.quiet)
    if result.attrs["stopped"]:
        target, figure = partial(target), partial(figure)
    print(_wrapped(result.attrs["verdict"]))
    if not given.quiet:
        print(f"\n{table(result)}\n")
    for remark in remarks:
        print(f"Mind: {remark}", file=sys.stderr)
    save(result, target)
    print(f"Everything is in {target}", flush=True)
    draw_study(result, figure)
    print(f"The figure is {figure}")
    if not given.quiet:
        print(f"It took {time.monotonic() - start:.0f} s.\n")
        print(_wrapped(with_caution(study.note)))
    if result.attrs["stopped"]:
        return 130
    return 1 if result.attrs["failed"] != "{}" else 0


def _number(option: str, text) -> float:
    """Return the number that an option holds."""
    try:
        return float(text)
    except ValueError:
        raise InputError(f"--{option} must be a number; got {text!r}.") from None


def _positive(option: str, texts) -> list[float]:
    """Return the positive numbers that an option holds."""
    return [check_positive(f"--{option}", _number(option, text)) for text in texts]


def chosen_study(given) -> Study:
    """Return the study that the options describe."""
    if given.medium is None:
        stray = next((name for name in NEEDS_MEDIUM if getattr(given, name) is not None), None)
        if stray:
            raise InputError(f"--{stray} belongs to --medium FILE.nc, which is not given.")
        study = _read(pathlib.Path(given.study_file)) if given.study_file else default_study()
    else:
        study = _own(given)
    changes = {} if given.model is None else {"model": given.model}
    if given.realisations is not None:
        count = check_integer("--realisations", _number("realisations", given.realisations), low=1)
        if count > 1 or study.realisations:  # one is what a medium that is not random has
            seeds = study.realisations or (study.setup.medium.with_seed(0) and 0,)
            changes["realisations"] = (*seeds, *range(max(seeds) + 1, max(seeds) + 1 + count))[:count]
    if given.medium is None:
        if given.length is not None:
            changes["setup"] = study.setup.with_(length=_number("length", given.length))
        if given.wavelength is not None or given.bandwidth is not None:
            changes["wavelengths"] = _waves(given, study)
        for name in ("resolution", "threshold"):
            if getattr(given, name) is not None:
                changes[name] = _number(name, getattr(given, name))
    return study.with_(**changes) if changes else study


def _waves(given, study: Study) -> list:
    """Return the wavelengths or bands of a study, changed by the options."""
    bands = study.bands
    centres = [band.centre for band in bands] or list(study.wavelengths)
    if given.wavelength is not None:
        centres = _positive("wavelength", given.wavelength)
    if given.bandwidth is not None:
        width = check_number("--bandwidth", _number("bandwidth", given.bandwidth), low=0.0)
        return [Band(centre, width) for centre in centres] if width else centres
    return [bands[0].with_(centre=centre) for centre in centres] if bands else centres


def _own(given) -> Study:
    """Return the study of the user's own medium."""
    if given.study_file:
        raise InputError(f"give either a study ({given.study_file}) or --medium, not both: a study has its own medium.")
    for name in ("variable", "kind", "wavelength"):
        if getattr(given, name) is None:
            raise InputError(f"--medium needs --{name} too. See branchlab study --help.")

    def optional(name):
        text = getattr(given, name)
        return None if text is None else _number(name, text)

    medium = SampledMedium.from_netcdf(
        given.medium,
        given.variable,
        given.kind,
        reference=optional("reference"),
        x=given.along or "x",
        y=given.across or "y",
    )
    bandwidth = BANDWIDTH if given.bandwidth is None else check_number("--bandwidth", optional("bandwidth"), low=0.0)
    return own_study(
        medium,
        _positive("wavelength", given.wavelength),
        bandwidth=bandwidth or None,
        length=optional("length"),
        width=optional("width"),
        sides=given.sides or "periodic",
        resolution=optional("resolution"),
        threshold=0.15 if given.threshold is None else _number("threshold", given.threshold),
        title=f"{given.variable} of {pathlib.Path(given.medium).name}",
        note=CAUTIONS.get(given.kind, ""),
    )


def _read(path: pathlib.Path) -> Study:
    """Return the study in a JSON file."""
    try:
        text = path.read_text(encoding="utf-8")
    except UnicodeDecodeError:
        raise InputError(
            f"{path} is not a text file; a study is JSON text. A netCDF medium goes with --medium."
        ) from None
    except OSError as fault:
        raise InputError(
            f"{path} cannot be read: {fault.strerror}. branchlab study --write-default makes one."
        ) from None
    try:
        return Study.from_json(text)
    except InputError as slip:
        raise InputError(f"{path}: {slip}") from None


def _write(study: Study, path: pathlib.Path, replace: bool) -> int:
    """Write a study to a JSON file."""
    text = study.to_json() + "\n"
    try:
        if path.exists() and not replace and path.read_text(encoding="utf-8") != text:
            raise InputError(f"{path} exists and holds something else. Choose another name, or add --replace.")
        path.write_text(text, encoding="utf-8")
    except UnicodeDecodeError:
        raise InputError(f"{path} exists and is no study. Choose another name.") from None
    except OSError as fault:
        raise InputError(f"{path} cannot be written: {fault.strerror}.") from None
    print(f"The study is in {path}; run it with: branchlab study {path}")
    return 0


def _wrapped(text: str) -> str:
    """Return text in lines of at most 110 characters, or the terminal's width, that hang under their beginning."""
    columns = min(110, max(60, shutil.get_terminal_size((110, 24)).columns))
    lines = []
    for line in text.splitlines():
        indent = "  " if line.startswith(("-", " ")) else ""
        lines += textwrap.wrap(line, columns, subsequent_indent=indent, break_long_words=False)
    return "\n".join(lines)


def _stem(given) -> str:
    """Return the name of the result after what is studied."""
    if given.study_file or given.medium:
        return f"{pathlib.Path(given.study_file or given.medium).stem}-study".replace("-study-study", "-study")
    return "branchlab-study"


def _opening(study: Study) -> str:
    """Return what will be done, in a few lines."""
    setup, unit = study.setup, "" if study.setup.length_unit == "1" else f" {study.setup.length_unit}"
    centres = [band.centre for band in study.bands] or study.wavelengths
    waves = ", ".join(f"{centre:g}" for centre in centres) + unit
    if study.bands:
        waves += f", each with a band of {100 * study.bands[0].width:g} % ({study.solved_wavelengths().size} in all)"
    seeds = len(study.realisations)
    window = f"a window of {setup.length:g} x {setup.width:g}{unit}, {setup.sides} sides, {setup.x.size} screens"
    lines = [
        study.title,
        f"{type(setup.source).__name__} through {type(setup.medium).__name__}: {window}, {setup.y.size} cells",
        f"{study.model} rays and the {study.model} wave",
        f"wavelengths {waves}; {seeds or 1} realisation{'s' if seeds > 1 else ''} of the medium",
        "(the first run after installation also compiles its loops)",
    ]
    return "\n".join(line for line in lines if line)


def _run(study: Study, *, quiet: bool):
    """Run a study behind a progress bar; return its result and the remarks made on the way."""
    with warnings.catch_warnings(record=True) as caught:
        warnings.simplefilter("once", BranchlabWarning)
        with tqdm(
            total=1.0,
            disable=quiet or None,  # None: no bar where stderr is not a terminal
            bar_format="{percentage:3.0f} % |{bar:40}| {elapsed}, {remaining} left",
            ncols=78,
            miniters=0.0,
            leave=False,
        ) as bar:
            result = study.run(lambda fraction: bar.update(max(0.0, min(fraction, 1.0) - bar.n)))
    remarks = dict.fromkeys(str(one.message) for one in caught if issubclass(one.category, BranchlabWarning))
    return result, list(remarks)
