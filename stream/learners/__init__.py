"""How weights are updated: one interface over FTRL-Proximal and truncated gradient."""

from stream.learners.averaging_learner import AveragingLearner
from stream.learners.learner import Learner
from stream.learners.rebuilding import Rows, rebuild

__all__ = ["AveragingLearner", "Learner", "Rows", "rebuild"]
