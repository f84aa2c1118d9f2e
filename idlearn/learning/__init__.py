"""Learned controllers: each starts from a classical one and keeps within its authority."""

from idlearn.learning.predictive import PredictiveController, train_predictive
from idlearn.learning.residual import ResidualController, train_residual

__all__ = ["PredictiveController", "ResidualController", "train_predictive", "train_residual"]
