"""`branchlab study`: what it prints and writes, files of other processes, slips, interruption."""

import fcntl
import json
import os
import pathlib
import pty
import re
import struct
import subprocess
import sys
import termios

import numpy as np
import pytest
import xarray as xr

from branchlab.cli import main
from branchlab.media import SampledMedium
from branchlab.page import fingerprint_in
from branchlab.results import load
from branchlab.studies import Study, default_study, own_study, study_of
from tests.small_study import small_result, small_study

PLANS = 1e-9  # Fourier transforms are planned anew in every process, or for every run: their round-off differs
WRITER = pathlib.Path(__file__).with_name("write_samples.py")
OWN = ["--medium", "gel.nc", "--variable", "c", "--kind", "speed", "--reference", "1500", "--wavelength", "0.4", "0.2"]


@pytest.fixture(autouse=True)
def _in_an_empty_folder(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)


def written(name="gel.nc", fault=""):
    """Let another process write samples."""
    subprocess.run([sys.executable, WRITER, name, fault], check=True)
    return name


def small_file(name="small.json", **changes):
    pathlib.Path(name).write_text(small_study(**changes).to_json(), encoding="utf-8")
    return name


def test_study_file_to_verdict_netcdf_and_figure(capsys):
    assert main(["study", small_file()]) == 0
    out, err = capsys.readouterr()
    for wanted in (
        "A small block", "3 realisations", "At resolution 0.15 mm", "at wavelength 0.3 mm", "95 % confidence",
        "interference that the band removes", "diffraction", "Numerical error: at most", "kappa", "+ caustic",
        "small-study.nc", "small-study.png", "Invented data", "not for navigation",
    ):  # fmt: skip
        assert wanted in out, wanted
    assert "Traceback" not in err
    result = load("small-study.nc")
    xr.testing.assert_allclose(result, small_result(), rtol=0, atol=PLANS)
    assert fingerprint_in("small-study.png") == result.attrs["fingerprint"] == small_study().fingerprint


def test_quiet_prints_the_verdict_only(capsys):
    assert main(["study", small_file(), "--realisations", "1", "--quiet"]) == 0
    out = capsys.readouterr().out
    assert out.startswith("At resolution")
    assert "A small block" not in out


def test_progress_is_shown_on_a_terminal():
    """On a pseudo-terminal of 40 x 100 the bar goes from 0 to 100 %; in a pipe there is none."""
    small_file(wavelengths=[0.3])
    command = [sys.executable, "-m", "branchlab", "study", "small.json", "--realisations", "1"]
    ours, theirs = pty.openpty()
    fcntl.ioctl(theirs, termios.TIOCSWINSZ, struct.pack("HHHH", 40, 100, 0, 0))
    with subprocess.Popen(command, stderr=theirs, stdout=subprocess.DEVNULL) as process:
        os.close(theirs)
        shown = b""
        while True:
            try:
                piece = os.read(ours, 4096)
            except OSError:  # the other end is closed
                break
            if not piece:
                break
            shown += piece
    os.close(ours)
    assert process.returncode == 0
    percents = [int(one) for one in re.findall(r"(\d+) % \|", shown.decode("utf-8"))]
    assert percents[0] == 0
    assert percents == sorted(percents)
    assert len(set(percents)) >= 2
    assert subprocess.run(command, capture_output=True, text=True, check=True).stderr == ""


def test_options_change_the_study():
    arguments = ["study", small_file(), "--realisations", "5", "--threshold", "0.2", "--resolution", "0.3"]
    assert main([*arguments, "--length", "6", "--wavelength", "0.2", "--write-default", "changed.json"]) == 0
    study = Study.from_json(pathlib.Path("changed.json").read_text(encoding="utf-8"))
    assert study.realisations == (1, 2, 3, 4, 5)
    assert (study.threshold, study.resolution, study.setup.length) == (0.2, 0.3, 6.0)
    (band,) = study.bands
    assert (band.centre, band.width, band.nodes) == (0.2, 0.4, 3)
    main([*arguments, "--bandwidth", "0", "--write-default", "plain.json"])
    assert Study.from_json(pathlib.Path("plain.json").read_text(encoding="utf-8")).wavelengths == (0.3, 0.15)


def test_write_default_round_trip(capsys):
    assert main(["study", "--write-default", "default.json"]) == 0
    assert "branchlab study default.json" in capsys.readouterr().out
    assert Study.from_json(pathlib.Path("default.json").read_text(encoding="utf-8")) == default_study()
    assert main(["study", "--write-default", "default.json"]) == 0  # the same text: nothing is lost
    assert main(["study", "default.json", "--write-default", "again.json"]) == 0
    assert pathlib.Path("again.json").read_text() == pathlib.Path("default.json").read_text()
    assert main(["study", "--realisations", "2", "--write-default", "default.json"]) == 2
    assert "exists and holds something else" in capsys.readouterr().err


def test_netcdf_of_another_process(capsys):
    written()
    assert main(["study", *OWN, "--realisations", "1"]) == 0
    out = capsys.readouterr().out
    assert "c of gel.nc" in out
    assert "at wavelength 0.4 mm" in out
    result = load("gel-study.nc")
    assert result.attrs["length_unit"] == "mm"
    with xr.open_dataset("gel.nc") as file:
        medium = SampledMedium.from_dataarray(file["c"].load(), "speed", reference=1500.0)
    np.testing.assert_allclose(medium.v, 1.0 - (1500.0 / file["c"].transpose("x", "y").values) ** 2, atol=1e-14)
    study = own_study(medium, [0.4, 0.2])
    assert study_of(result).setup == study.setup
    assert study_of(result).model == "full"
    assert "the paraxial rays up to" in out
    again = study.run()
    np.testing.assert_allclose(result["misplaced_flux"], again["misplaced_flux"], atol=PLANS)
    assert result["misplaced_flux"].isel(x=-1).min() > 10 * result["numerical_error"].max()


@pytest.mark.parametrize(
    ("kind", "values", "reference"),
    [
        ("index", lambda c: 1500.0 / c, "1"),
        ("v", lambda c: 1.0 - (1500.0 / c) ** 2, None),
        ("depth", lambda c: (c / 10.0) ** 2, "22500"),
    ],
)
def test_kinds_describe_one_medium(kind, values, reference):
    """c, n = c0/c, v = 1 - n**2, and the depth of c = sqrt(g h), say the same: so do the studies."""
    written()
    with xr.open_dataset("gel.nc") as file:
        samples = file.load()
    units = {"index": "1", "v": "1", "depth": "m"}[kind]
    xr.Dataset({"q": values(samples["c"]).assign_attrs(units=units)}).to_netcdf("other.nc", engine="h5netcdf")
    options = ["--wavelength", "0.4", "--bandwidth", "0", "--length", "4", "--quiet", "--model", "paraxial"]
    assert main(["study", *OWN[:6], "--reference", "1500", *options]) == 0
    given = ["--medium", "other.nc", "--variable", "q", "--kind", kind]
    assert main(["study", *given, *(["--reference", reference] if reference else []), *options]) == 0
    first, second = load("gel-study.nc"), load("other-study.nc")
    np.testing.assert_allclose(first["intensity_wave"], second["intensity_wave"], atol=1e-9)  # round-off of the samples


def test_nothing_of_another_study_is_overwritten(capsys):
    options = ["--realisations", "1", "--quiet", "--output", "result.nc"]
    small_file()
    assert main(["study", "small.json", *options]) == 0
    first = load("result.nc")
    assert main(["study", "small.json", *options]) == 0  # the same study: replaced
    capsys.readouterr()
    assert main(["study", "small.json", *options, "--threshold", "0.2"]) == 2
    assert (
        "result.nc exists and is not a result of this study. Choose another name with --output"
        in capsys.readouterr().err
    )
    assert main(["study", "small.json", *options[:3], "--threshold", "0.2", "--figure", "result.png"]) == 2
    assert "result.png exists and is not" in capsys.readouterr().err
    xr.testing.assert_identical(load("result.nc"), first)
    assert main(["study", "small.json", *options, "--threshold", "0.2", "--replace"]) == 0
    assert load("result.nc").attrs["threshold"] == 0.2
    pathlib.Path("notes.nc").write_text("mine", encoding="utf-8")
    assert main(["study", "small.json", "--output", "notes.nc"]) == 2
    assert pathlib.Path("notes.nc").read_text(encoding="utf-8") == "mine"


STOPPING = """
import os, signal, sys, time
from branchlab.cli import main
from branchlab.studies import Study
compared = Study.compared
def interrupted(self, seed=None, progress=None, **options):
    if seed == {seed}:
        os.kill(os.getpid(), signal.SIGINT)
        time.sleep(30)
    return compared(self, seed, progress, **options)
Study.compared = interrupted
sys.exit(main(["study", "small.json"]))
"""


@pytest.mark.parametrize(("seed", "kept"), [(3, [1, 2]), (1, [])])
def test_ctrl_c_keeps_what_is_done(seed, kept):
    small_file()
    done = subprocess.run([sys.executable, "-c", STOPPING.format(seed=seed)], capture_output=True, text=True)
    assert done.returncode == 130
    assert "Traceback" not in done.stderr
    if not kept:
        assert "nothing is written" in done.stderr
        assert sorted(p.name for p in pathlib.Path().iterdir()) == ["small.json"]
        return
    assert "stopped after 2 of 3 realisations; the result holds these" in done.stderr
    result = load("small-study-partial.nc")
    assert result["realisation"].values.tolist() == kept
    assert pathlib.Path("small-study-partial.png").exists()
    assert not pathlib.Path("small-study.nc").exists()
    np.testing.assert_allclose(result["mismatch"], small_result()["mismatch"].sel(realisation=kept), atol=PLANS)


def test_a_fault_of_ours_keeps_its_traceback(monkeypatch):
    def broken(self, seed=None, progress=None, **options):
        raise ZeroDivisionError("ours")

    monkeypatch.setattr(Study, "compared", broken)
    with pytest.raises(ZeroDivisionError, match="ours"):
        main(["study", small_file()])


def test_failed_realisations_are_told(monkeypatch, capsys):
    compared = Study.compared

    def sometimes(self, seed=None, progress=None, **options):
        if seed == 2:
            raise ValueError("odd")
        return compared(self, seed, progress, **options)

    monkeypatch.setattr(Study, "compared", sometimes)
    assert main(["study", small_file()]) == 1
    assert "Mind: 1 of 3 realisations failed; the result holds the others. The first: seed 2, ValueError: odd" in (
        capsys.readouterr().err
    )
    assert json.loads(load("small-study.nc").attrs["failed"]) == {"2": "ValueError: odd"}


def edited(**changes):
    """Write the small study with fields of its JSON changed by hand, as a user would."""
    fields = json.loads(small_study().to_json())
    for path, value in changes.items():
        place = fields
        *parents, last = path.split("__")
        for name in parents:
            place = place[name]
        place[last] = value
    pathlib.Path("edited.json").write_text(json.dumps(fields), encoding="utf-8")
    return ["edited.json"]


def medium(fault="", **options):
    """Return the options for a faulty file, some of them replaced."""
    name = written("bad.nc", fault)
    given = {"--medium": name, "--variable": "c", "--kind": "speed", "--wavelength": "0.4", **options}
    return [word for pair in given.items() if pair[1] is not None for word in pair]


def text_file():
    pathlib.Path("text.nc").write_text("these are words", encoding="utf-8")
    return "text.nc"


SLIPS = {
    "not netCDF": (lambda: medium(**{"--medium": text_file()}), r"text\.nc is not a netCDF file"),
    "no file": (lambda: medium(**{"--medium": "none.nc"}), r"there is no file none\.nc"),
    "variable missing": (lambda: medium(**{"--variable": "speed"}), r"no variable 'speed'; it has c"),
    "NaN": (lambda: medium("nan"), r"values\[40, 30\].*x = 6, y = 4\.5.*finite"),
    "reversed axis": (lambda: medium("reversed"), r"y falls from 24 to 0; it must rise"),
    "uneven axis": (lambda: medium("uneven"), r"y must be equidistant.*y\[\d+\] = "),
    "negative speed": (lambda: medium("negative"), r"values\[3, 4\] = -1 .* is not positive"),
    "v reaches 1": (
        lambda: edited(setup__medium__strength=0.9),
        r"v = \S+ at x = \S+, y = \S+; rays exist only where v < 1",
    ),
    "rays turn back": (
        lambda: edited(setup__medium__strength=0.25, setup__length=16.0),
        r"degrees|sine of the angle|turn",
    ),
    "wavelength too short": (
        lambda: medium("rough", **{"--wavelength": "0.01"}),
        r"wavelength .*(6|six) .*(spacing|points)",
    ),
    "negative wavelength": (lambda: medium(**{"--wavelength": "-1"}), r"--wavelength must be positive; got -1"),
    "negative width": (lambda: medium(**{"--width": "-3"}), r"width must be positive; got -3"),
    "words for numbers": (lambda: medium(**{"--resolution": "fine"}), r"--resolution must be a number; got 'fine'"),
    "resolution below the grid": (lambda: edited(resolution=0.01), r"resolution 0\.01 is below one cell"),
    "beam wider than the window": (
        lambda: edited(setup__source={"type": "Beam", "waist": 30.0}),
        r"(beam|waist|source).*(wid|fit)",
    ),
    "unknown kind": (lambda: medium(**{"--kind": "sped"}), r"kind 'sped' is not known.*Did you mean 'speed'"),
    "unknown field": (lambda: edited(setup__lenght=3), r"edited\.json: Setup has no argument 'lenght'.*'length'"),
    "unknown type": (lambda: edited(setup__source={"type": "PlainWave"}), r"Did you mean 'PlaneWave'"),
    "unknown option": (lambda: ["--wavelenght", "1"], r"'--wavelenght' is not known\. Did you mean '--wavelength'"),
    "missing option": (lambda: medium(**{"--variable": None}), r"--medium needs --variable too"),
    "stray option": (lambda: ["--kind", "v"], r"--kind belongs to --medium"),
    "two media": (lambda: [*edited(), *medium()], r"not both"),
    "no JSON": (lambda: [text_file()], r"this is not JSON"),
    "netCDF as study": (lambda: [written()], r"not a text file"),
    "no study": (lambda: ["none.json"], r"none\.json cannot be read"),
    "realisations of samples": (lambda: [*medium(), "--realisations", "3"], r"SampledMedium is not random"),
    "no realisations": (lambda: ["--realisations", "0"], r"--realisations must be a whole number of at least 1"),
    "no folder": (lambda: ["--output", "nowhere/x.nc"], r"there is no folder nowhere"),
    "wrong ending": (lambda: ["--output", "x.txt"], r"must end in \.nc"),
    "no room in memory": (lambda: edited(setup__cells=1 << 24), r"a study of 3 realisations.*GiB are free"),
    "no room at all": (lambda: edited(setup__cells=10**13), r"memory|GiB"),
    "march without room": (
        lambda: medium(**{"--wavelength": "1e-9", "--bandwidth": "0"}),
        r"GiB are free|memory of this machine|6 .*(spacing|points)",
    ),
}


@pytest.mark.parametrize("slip", SLIPS)
def test_slips_end_in_one_message(slip, capsys):
    arguments, message = SLIPS[slip]
    try:
        code = main(["study", *arguments(), "--quiet"])
    except SystemExit as end:  # argparse ends by itself
        code = end.code
    out, err = capsys.readouterr()
    assert code == 2
    assert "Traceback" not in err
    (line,) = err.strip().splitlines()
    assert line.startswith("branchlab: ")
    assert re.search(message, line), line
    assert out == ""


def test_a_slip_needs_no_traceback_in_a_process_of_its_own():
    done = subprocess.run(
        [sys.executable, "-m", "branchlab", "study", "--threshold", "2"], capture_output=True, text=True
    )
    assert done.returncode == 2
    assert done.stdout == ""
    assert done.stderr == "branchlab: threshold must be in (0, 1); got 2.0.\n"


def test_version_and_help(capsys):
    from branchlab import __version__

    for option, wanted in (("--version", f"branchlab {__version__}"), ("--help", "run a study to the verdict")):
        with pytest.raises(SystemExit) as end:
            main([option])
        assert end.value.code == 0
        assert wanted in capsys.readouterr().out
    with pytest.raises(SystemExit) as end:
        main([])
    assert end.value.code == 2
