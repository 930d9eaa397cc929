"""Non-zero weights held against a reference in, their F1 as curves and their sizes out."""

from __future__ import annotations

from collections.abc import Sequence

from stream.reports.curves.looks import Row, at_strength, curves, entries, trace
from stream.reports.drawing import LogPlaces, Picture, axis, layout
from stream.reports.markup import Section, pictured
from stream.reports.texts import UNKNOWN, count, plain, ratio

__all__ = ["supports"]

HEIGHT = 340
_BATCH = (
    "F1 of the non-zero weights, taken for a guess at which weights the batch fit keeps: 1 where they are "
    "the same."
)
_TRUTH = (
    "F1 of the non-zero weights, taken for a guess at which tokens were planted. Rare planted tokens cannot "
    "be told from noise yet, so that the batch fit stays below 1 as well."
)
_READING = (
    "F1 is the harmonic mean of precision (non-zero weights that are right) and recall (right ones that are "
    "non-zero); the tables at the end have both."
)


def supports(document: Row) -> Section:
    """Curves against the batch fit and, where it is known, against the truth."""
    pictures, body = {}, []
    kinds = [("against_batch", _BATCH, False)]
    if document["has_truth"]:
        kinds.append(("against_truth", _TRUTH, True))
    for key, gist, batch in kinds:
        for i, strength in enumerate(document["strengths"]):
            name = f"{key.replace('_', '-')}-{i}"
            pictures[name] = _picture(at_strength(document, strength), key, batch, strength)
            body.append(f"<h3>{'Planted tokens' if batch else 'Batch fit'}, strength {plain(strength)}</h3>")
            body.append(pictured(name, pictures[name], gist if i == 0 else "", ""))
    body.append(f"<p>{_READING}</p>")
    return Section("supports", "Which weights are kept", "Support", "".join(body), pictures)


def _picture(fits: Sequence[Row], key: str, batch: bool, strength: float) -> Picture:
    messages = [fit["messages"] for fit in fits]
    drawn = curves(fits, batch)
    traces = []
    for curve in drawn:
        values = [row[key]["f1"] for row in curve.rows]
        texts = [
            f"F1 {UNKNOWN if v is None else ratio(v)}, {count(row['nnz'])} weights"
            for v, row in zip(values, curve.rows, strict=True)
        ]
        traces.append(trace(curve, messages, values, texts))
    across = LogPlaces(messages, count)
    figure = {
        "data": traces,
        "layout": layout(HEIGHT, xaxis=across.axis("messages"), yaxis=axis("F1", range=[0, 1.03])),
    }
    of = "the planted tokens" if batch else "the batch fit"
    return Picture(figure, HEIGHT, f"F1 against {of} at strength {plain(strength)}.", entries(drawn))
