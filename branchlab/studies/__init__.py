"""Studies: a setup, its wavelengths and its realisations, run to the verdict."""

from branchlab.studies.default import default_study
from branchlab.studies.model_error import paraxial_error
from branchlab.studies.own import own_study
from branchlab.studies.study import Study, study_of
from branchlab.studies.table import table

__all__ = ["Study", "default_study", "own_study", "paraxial_error", "study_of", "table"]
