"""Files that a study writes: nothing of another study is overwritten unasked."""

import os
import pathlib

from branchlab.errors import InputError
from branchlab.page import fingerprint_in
from branchlab.results import load
from branchlab.studies import Study


def check_target(path: pathlib.Path, ending: str, study: Study, *, replace: bool) -> None:
    """Refuse a file that cannot be written, or that holds anything but an earlier result of this very study.

    Parameters
    ----------
    path : path
    ending : {".nc", ".png"}
    study : Study
    replace : bool
        The user wants the file replaced, whatever it holds.
    """
    if path.suffix != ending:
        raise InputError(f"{path} must end in {ending}.")
    folder = path.parent
    if not folder.is_dir():
        raise InputError(f"{path} cannot be written: there is no folder {folder}.")
    if not os.access(folder, os.W_OK):
        raise InputError(f"{path} cannot be written: no permission for the folder {folder}.")
    if path.is_dir():
        raise InputError(f"{path} is a folder.")
    if path.exists() and not replace and _fingerprint(path) != study.fingerprint:
        option = "--output" if ending == ".nc" else "--figure"
        raise InputError(
            f"{path} exists and is not a result of this study. Choose another name with {option}, or add --replace."
        )


def _fingerprint(path: pathlib.Path) -> str | None:
    """Return the fingerprint of the study whose result a file holds, or None."""
    try:
        return load(path).attrs.get("fingerprint") if path.suffix == ".nc" else fingerprint_in(path)
    except InputError:
        return None


def partial(path: pathlib.Path) -> pathlib.Path:
    """Return the name for a result that was stopped: it never takes the place of a whole one."""
    return path.with_name(f"{path.stem}-partial{path.suffix}")
