"""A study that takes a second: what the tests of studies, command line and figure share."""

import functools

from branchlab.launch import Band, PlaneWave, Setup
from branchlab.media import RandomMedium
from branchlab.studies import Study

SETUP = Setup(
    RandomMedium(0.1, 1.0, seed=1, box=(16.0, 8.0)), PlaneWave(), 12.0, 8.0, screens=13, cells=128, length_unit="mm"
)


def small_study(**changes):
    """Return the study with some of its arguments changed."""
    study = Study(
        SETUP,
        [Band(0.3, 0.4, nodes=3), Band(0.15, 0.4, nodes=3)],
        resolution=0.15,
        realisations=[1, 2, 3],
        measures=("attribution", "scintillation"),
        model="paraxial",
        title="A small block",
        note="Invented data.",
    )
    return study.with_(**changes)


@functools.cache
def small_result():
    """Return its result, computed once a session; do not write to it."""
    return small_study().run()
