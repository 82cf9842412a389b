"""What is shown outside a notebook: figures."""

from branchlab.page.figure import draw_study, fingerprint_in

__all__ = ["draw_study", "fingerprint_in"]
