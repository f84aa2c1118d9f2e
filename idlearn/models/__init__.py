"""Models of plants: the linear innovations form, ensembles of it, and their files."""

from idlearn.models.arx import ArxModel
from idlearn.models.ensemble import Ensemble
from idlearn.models.innovations import InnovationsModel
from idlearn.models.storage import load_model, read_extra, save_model

__all__ = ["ArxModel", "Ensemble", "InnovationsModel", "load_model", "read_extra", "save_model"]
