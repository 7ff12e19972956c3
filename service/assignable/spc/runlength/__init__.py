"""Run lengths: how long a chart runs until it signals."""

from .of_rules import continuous, discrete, shewhart, signal_probability
from .survival import RunLength

__all__ = ["RunLength", "continuous", "discrete", "shewhart", "signal_probability"]
