"""How weights are updated: one interface over FTRL-Proximal and truncated gradient."""

from stream.learners.learner import Learner

__all__ = ["Learner"]
