"""The colours of figures: chosen for any colour vision, and to stay readable in grey."""

INTENSITY = ("#0d1b2e", "#1d3b5c", "#34618a", "#6c8aa0", "#b3aa97", "#e3c98f", "#fff2cf")
"""Knots of the map of intensities, dark to light: night blue, slate, sand, ivory. Lightness rises throughout."""

MISMATCH = ("#0f4c5c", "#3f8596", "#9cc3cb", "#f6f4ef", "#eab98c", "#c97a34", "#7d3f0c")
"""Knots of the map of signed numbers: rays above the wave (petrol), equal (paper), wave above the rays (copper)."""

WAVES = ("#12355b", "#2a7f8e", "#d08c2a", "#a23b4a", "#6b5b95", "#5f6b3c")
"""Colours of curves, one a wavelength; from the seventh on they repeat with another dash."""

PARTS = {
    "removable": "#bcd6df",
    "caustic": "#d6a03c",
    "interference": "#bcd6df",
    "diffraction": "#7d3f0c",
}
"""Colours of the parts of the mismatch; they differ in lightness too."""

INK, QUIET, PAPER, RULE = "#1b1f24", "#646b73", "#ffffff", "#c9cdd2"
"""Text, secondary text, background, thin lines."""
