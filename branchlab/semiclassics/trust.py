"""When a semiclassical sum is not to be trusted: the limits, in one place."""

import numpy as np

FLUX_EXCESS_LIMIT = 0.15
"""Largest abs(flux of the sum / flux of its rays - 1). The sum is not unitary; flux that it makes or loses is flux
that it also misplaces. At 15 % that is as much as a typical mismatch of rays and wave, so that the sum could no
longer tell where the mismatch comes from (measured: its distance to the wave grows with the excess)."""

UNRESOLVED_LIMIT = 0.05
"""Largest share of the flux on rays too far apart for the wavelength. What they carry is missing from the sum, and
5 % missing is seen in a misplaced flux that is to be attributed to some percent."""


ENTRY_LIMIT = 0.03
"""Largest relative error (L2) with which packets rebuild the entry field. Frozen Gaussians smear a front that is no
larger than a few packets; a beam that enters with 3 % error was found up to 18 % off in flux further on, one with
1 % followed the wave (our measurement)."""


CAUTIONS = {
    "frozen-gaussian": "not to be trusted where the front is folded on phase-space areas below 2 pi/k, nor for beams "
    "and small sources",
    "herman-kluk": "contains part of the diffraction; not to be trusted where rays are chaotic and its grid too coarse "
    "(flux excess, unresolved flux)",
    "uniform": "not to be trusted at cusps, where two folds meet",
    "primitive": "not to be trusted within some Airy widths of a caustic: infinite on it, dark behind it",
}
"""What every result of a method says about itself."""


def trusted(flux_excess, unresolved_share, entry_error):
    """Return where the sum's own alarm is silent.

    Parameters
    ----------
    flux_excess : array
        Flux of the sum over that of its rays, minus 1.
    unresolved_share : array
        Unresolved flux over that of the rays.
    entry_error : array
        Relative error of the entry field; nan where the method has no packets to rebuild it from.
    """
    rebuilt = np.isnan(entry_error) | (entry_error <= ENTRY_LIMIT)
    return (np.abs(flux_excess) <= FLUX_EXCESS_LIMIT) & (unresolved_share <= UNRESOLVED_LIMIT) & rebuilt
