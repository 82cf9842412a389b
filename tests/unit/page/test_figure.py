"""The figure of a study: what it shows, and colours that any colour vision can tell apart."""

import numpy as np
import pytest
from PIL import Image

from branchlab.errors import InputError
from branchlab.page import draw_study, fingerprint_in, palette
from branchlab.page.figure import _figure
from tests.small_study import small_result, small_study


@pytest.fixture(scope="module")
def figure():
    return _figure(small_result())


def texts(figure):
    from matplotlib.text import Text

    return " | ".join(text.get_text() for text in figure.findobj(Text))


def test_says_what_is_shown_in_words_with_units(figure):
    said = texts(figure)
    for wanted in (
        "A small block", "Invented data", "At resolution 0.15 mm", "all but 15 %", "range x [mm]", "across y [mm]",
        "Mismatch: wave minus rays", "misplaced flux [%]", "threshold 15 %", "mean of 3 realisations", "0.3 mm", "0.15 mm",
        "removable interference", "caustics", "diffraction", "numerical error",
    ):  # fmt: skip
        assert wanted in said, wanted


def test_maps_stand_upright(figure):
    """x to the right, y up; the pixels are the result's, rays and wave on one scale, the mismatch even about 0."""
    images = [axes.images[0] for axes in figure.axes if axes.images]
    result = small_result().isel(realisation=0)
    rays, wave, mismatch = images
    at = 0 if np.allclose(wave.get_array(), result["intensity_wave"].isel(wavelength=0).values.T) else 1
    for image, name in ((rays, "intensity_ray"), (wave, "intensity_wave"), (mismatch, "mismatch")):
        values = result[name] if name == "intensity_ray" else result[name].isel(wavelength=at)
        np.testing.assert_array_equal(image.get_array(), values.transpose("y", "x"))
        assert image.origin == "lower"
        assert image.get_extent()[2:] == pytest.approx([-4.0, 4.0])
        assert image.axes.get_xlim() == (0.0, 12.0)
    assert rays.get_clim() == wave.get_clim()
    assert mismatch.get_clim()[0] == -mismatch.get_clim()[1]


def test_curves_and_bars_hold_the_numbers(figure):
    result = small_result()
    curves, bars = [axes for axes in figure.axes if not axes.images and axes.get_title(loc="left")]
    mean = 100 * result["misplaced_flux"].mean("realisation")
    drawn = [line.get_ydata() for line in curves.lines]
    for at in range(2):
        assert any(np.size(y) == 13 and np.allclose(y, mean.isel(wavelength=at)) for y in drawn)
    widths = sum(bar.get_width() for bar in bars.patches)
    assert widths == pytest.approx(float(mean.isel(x=-1).sum()))


def test_no_text_runs_off_the_page_or_over_another(figure):
    from matplotlib.backends.backend_agg import FigureCanvasAgg

    canvas = FigureCanvasAgg(figure)
    canvas.draw()
    renderer = canvas.get_renderer()
    boxes = [text.get_window_extent(renderer) for text in figure.texts]
    for axes in figure.axes:
        boxes += [axes.title.get_window_extent(renderer), axes._left_title.get_window_extent(renderer)]
        boxes += [text.get_window_extent(renderer) for text in axes.texts if text.get_text()]
    boxes = [box for box in boxes if box.width > 1]
    width, height = canvas.get_width_height()
    for box in boxes:
        assert box.x0 >= 0
        assert box.x1 <= width
        assert box.y0 >= 0
        assert box.y1 <= height
    overlaps = [
        (a, b)
        for i, a in enumerate(boxes)
        for b in boxes[i + 1 :]
        if min(a.x1, b.x1) - max(a.x0, b.x0) > 1 and min(a.y1, b.y1) - max(a.y0, b.y0) > 1
    ]
    assert overlaps == []


def test_file_is_a_slide_that_knows_its_study(tmp_path):
    path = draw_study(small_result(), tmp_path / "figure.png")
    with Image.open(path) as image:
        assert image.format == "PNG"
        assert image.size[0] >= 1920
        assert image.size[0] / image.size[1] == pytest.approx(16 / 9, rel=0.01)
        assert np.asarray(image.convert("L")).std() > 20
    assert fingerprint_in(path) == small_study().fingerprint


def test_other_files_have_no_fingerprint(tmp_path):
    Image.new("L", (4, 4)).save(tmp_path / "plain.png")
    assert fingerprint_in(tmp_path / "plain.png") is None
    (tmp_path / "text.png").write_text("no picture", encoding="utf-8")
    assert fingerprint_in(tmp_path / "text.png") is None
    with pytest.raises(InputError, match="cannot be read"):
        fingerprint_in(tmp_path / "none.png")


@pytest.mark.parametrize(
    "change",
    [
        {"realisations": [1]},
        {"realisations": [1, 2], "measures": ()},
        {"wavelengths": [0.3]},
        {"title": "costs $5 and $6 <b>", "note": ""},
        {"threshold": 0.9},
        {"threshold": 0.0001},
    ],
    ids=["one", "no parts", "no band", "odd title", "never crossed", "not resolved"],
)
def test_every_sort_of_result_can_be_drawn(change, tmp_path):
    result = small_study(**{"wavelengths": [small_study().bands[0]], "realisations": [1], **change}).run()
    path = draw_study(result, tmp_path / "figure.png")
    assert path.stat().st_size > 50_000
    said = texts(_figure(result))
    assert change.get("title", "A small block") in said


def test_only_results_of_studies(tmp_path):
    bare = small_result().copy()
    bare.attrs = {name: text for name, text in bare.attrs.items() if name != "verdict"}
    with pytest.raises(InputError, match="not the result of a study"):
        draw_study(bare, tmp_path / "figure.png")
    with pytest.raises(InputError, match="cannot be written"):
        draw_study(small_result(), tmp_path / "nowhere" / "figure.png")


def linear(colour):
    c = np.array([int(colour[i : i + 2], 16) for i in (1, 3, 5)]) / 255.0
    return np.where(c > 0.04045, ((c + 0.055) / 1.055) ** 2.4, c / 12.92)


def lightness(colour):
    """CIE L* of an sRGB colour (IEC 61966-2-1; CIE 15:2004)."""
    y = float(linear(colour) @ [0.2126, 0.7152, 0.0722])
    return 116.0 * np.cbrt(y) - 16.0 if y > 0.008856 else 903.3 * y


# simulation of full deuteranopia and protanopia in linear RGB (Machado, Oliveira & Fernandes, IEEE Trans. Vis. Comput.
# Graph. 15 (2009) 1291, severity 1.0; from memory)
VISIONS = {
    "deutan": [[0.367322, 0.860646, -0.227968], [0.280085, 0.672501, 0.047413], [-0.011820, 0.042940, 0.968881]],
    "protan": [[0.152286, 1.052583, -0.204868], [0.114503, 0.786281, 0.099216], [-0.003882, -0.048116, 1.051998]],
}


def lab(rgb):
    """CIE L*a*b* of linear sRGB (D65)."""
    xyz = np.array([[0.4124, 0.3576, 0.1805], [0.2126, 0.7152, 0.0722], [0.0193, 0.1192, 0.9505]]) @ np.clip(rgb, 0, 1)
    f = np.cbrt(np.maximum(xyz / [0.9505, 1.0, 1.089], 0.0))
    return np.array([116 * f[1] - 16, 500 * (f[0] - f[1]), 200 * (f[1] - f[2])])


def test_intensity_rises_in_lightness():
    assert (np.diff([lightness(c) for c in palette.INTENSITY]) > 8).all()


def test_mismatch_is_even_about_the_middle():
    values = np.array([lightness(c) for c in palette.MISMATCH])
    assert values.argmax() == 3
    np.testing.assert_allclose(values[:3], values[:3:-1], atol=8)


@pytest.mark.parametrize("vision", VISIONS)
@pytest.mark.parametrize(
    "colours", [palette.WAVES[:4], [palette.MISMATCH[1], palette.MISMATCH[5]]], ids=["curves", "signs"]
)
def test_colours_differ_for_the_colour_blind(vision, colours):
    """At least 10 units of L*a*b* apart (2.3 is just noticeable: Mahy et al., Color Res. Appl. 19 (1994) 105)."""
    seen = [lab(np.array(VISIONS[vision]) @ linear(c)) for c in colours]
    for i, one in enumerate(seen):
        for other in seen[i + 1 :]:
            assert np.linalg.norm(one - other) > 10
