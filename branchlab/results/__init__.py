"""Results: the written layout of every Dataset, where it comes from, and how it is kept."""

from branchlab.results.layout import check, dataset, labelled
from branchlab.results.provenance import provenance, setup_of
from branchlab.results.store import load, save

__all__ = ["check", "dataset", "labelled", "load", "provenance", "save", "setup_of"]
