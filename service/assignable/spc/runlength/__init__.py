"""Run lengths: how long a chart runs until it signals."""

from .of_rules import discrete, shewhart, signal_probability, steady_state_arl
from .survival import RunLength

__all__ = ["RunLength", "discrete", "shewhart", "signal_probability", "steady_state_arl"]
