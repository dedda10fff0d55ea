"""Learns from the simulated corpus what can be trusted; the only room that knows scikit-learn."""

from sigguard.training.run import TrainResult, train

__all__ = ["TrainResult", "train"]
