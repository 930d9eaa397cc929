"""The tuning document in, the parts of the page out, in the order in which they are read."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from stream.reports.markup import Section
from stream.reports.sections.calibration import calibration
from stream.reports.sections.course import course
from stream.reports.sections.making import making
from stream.reports.sections.paths import paths
from stream.reports.sections.planted import planted
from stream.reports.sections.sizes import sizes
from stream.reports.sections.slices import slices
from stream.reports.sections.thresholds import thresholds
from stream.reports.sections.tokens import tokens

__all__ = ["sections"]


def sections(document: Mapping[str, Any]) -> list[Section]:
    """Every part that `document` has something for; only the planted truth may be missing."""
    parts = [sizes, paths, tokens, course, calibration, thresholds, slices]
    found = [part(document) for part in parts]
    if document.get("truth"):
        found.append(planted(document["truth"]))
    return [*found, making(document)]
