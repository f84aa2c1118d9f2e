"""Identification: from a log to plausible plants, with what can be said against them."""

from idlearn.identification.armax import ArmaxEstimator
from idlearn.identification.arx import ArxEstimator
from idlearn.identification.choice import Identified, identify
from idlearn.identification.criteria import criteria
from idlearn.identification.ensembles import EnsembleSet, ModelRecord, build_ensembles
from idlearn.identification.feedback import Feedback, find_feedback
from idlearn.identification.fopdt import Fopdt, fit_fopdt, two_point
from idlearn.identification.orders import Orders, OrderTable, order_search
from idlearn.identification.result import FitResult, Status
from idlearn.identification.support import Support, support_region
from idlearn.identification.validation import Validation, validate

__all__ = [
    "ArmaxEstimator",
    "ArxEstimator",
    "EnsembleSet",
    "Feedback",
    "FitResult",
    "Fopdt",
    "Identified",
    "ModelRecord",
    "OrderTable",
    "Orders",
    "Status",
    "Support",
    "Validation",
    "build_ensembles",
    "criteria",
    "find_feedback",
    "fit_fopdt",
    "identify",
    "order_search",
    "support_region",
    "two_point",
    "validate",
]
