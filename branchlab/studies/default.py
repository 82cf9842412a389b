"""The study that runs when no other is given: a scenario of our own, with invented data."""

from branchlab.launch import Band, PlaneWave, Setup
from branchlab.media import RandomMedium, settings
from branchlab.studies.study import Study

MEGAHERTZ = (1.0, 2.0, 5.0)
SPEED, SPEED_RMS = 1500.0, 30.0  # m/s
CORRELATION_LENGTH, LENGTH, WIDTH = 5.0, 150.0, 80.0  # mm
BANDWIDTH, NODES = 0.4, 5
SEEDS = tuple(range(1, 7))


def default_study() -> Study:
    """Return the embedded study: ultrasound of 1 to 5 MHz through a gel block of uneven sound speed.

    Lengths in mm. The block, 150 mm by 80 mm, repeats itself across after its width; sound speed 1500 m/s with
    2 % rms, gaussian correlation of 5 mm. These numbers are invented.
    """
    tones = [settings.sound(frequency=1e6 * f, speed=SPEED, speed_rms=SPEED_RMS) for f in MEGAHERTZ]
    medium = RandomMedium(tones[0].strength, CORRELATION_LENGTH, SEEDS[0], box=(128 * CORRELATION_LENGTH, WIDTH))
    return Study(
        Setup(medium, PlaneWave(), LENGTH, WIDTH, screens=61, cells=256, length_unit="mm"),
        [Band(round(1e3 * tone.wavelength, 12), BANDWIDTH, nodes=NODES) for tone in tones],
        resolution=0.5,
        realisations=SEEDS,
        measures=("attribution", "scintillation"),
        title="Ultrasound of 1 to 5 MHz through 150 mm of uneven gel",
        note="Invented data: a gel block of 1500 m/s with 2 % rms sound speed and a correlation length of 5 mm. "
        + tones[0].note,
    )
