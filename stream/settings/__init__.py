"""Settings: the models of a run's settings and `load`, which reads them; pydantic is all that it imports."""

from stream.settings.loading import load
from stream.settings.models import (
    Category,
    Cross,
    Feed,
    FieldSettings,
    Learner,
    ListOf,
    MessagePaths,
    Metrics,
    Outcomes,
    Quantity,
    Settings,
    Space,
    State,
    Words,
)

__all__ = [
    "Category",
    "Cross",
    "Feed",
    "FieldSettings",
    "Learner",
    "ListOf",
    "MessagePaths",
    "Metrics",
    "Outcomes",
    "Quantity",
    "Settings",
    "Space",
    "State",
    "Words",
    "load",
]
