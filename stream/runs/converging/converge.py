"""A log, learners and strengths in; how near each learner comes to batch fits of the same messages out."""

from __future__ import annotations

import time
from collections.abc import Iterator, Sequence
from dataclasses import asdict
from importlib.metadata import version
from typing import Any

from stream.batch_fits.fits import refuse_missing
from stream.errors import BadData, BadSettings
from stream.runs.converging.fitting import Optimum, fitted
from stream.runs.converging.following import Followed, Tell, after_epochs, followed, warm_up
from stream.runs.converging.held import Held, hold
from stream.runs.converging.job import Job, Known, learner_settings
from stream.runs.converging.judging import Fitted, Judge, agreement
from stream.runs.converging.slopes import slope_of
from stream.runs.converging.windows import windows_of
from stream.runs.presence import refuse_unlearnable
from stream.settings import Settings

__all__ = ["converge"]

SLOPES_OF = ("gap", "excess_log_loss")


def converge(
    settings: Settings,
    job: Job,
    known: Known | None = None,
    *,
    about: dict[str, Any],
    tell: Tell = lambda share, text: None,
) -> dict[str, Any]:
    """Compares; the document that docs/proof.md describes.

    `known`: what is known of a simulated stream; `about`: how the log was made, for whoever reads the
    document. Raises UsageError, BadSettings, BadData, CannotCreate and what reading raises.
    """
    refuse_unlearnable(settings)
    refuse_missing(job.solver)
    if settings.feed.kind != "log":
        raise BadSettings('converge reads logs, more than once: name the LOG, or set feed.kind = "log"')
    began = time.monotonic()
    held = hold(settings, job.messages + job.fresh, job.memory_bytes, tell)
    if held.messages < job.messages + job.fresh:
        raise BadData(
            f"the log has {held.messages:,} messages, fewer than the {job.messages:,} to learn and the "
            f"{job.fresh:,} fresh ones"
        )
    judge = Judge(held, (job.messages, held.messages), settings, known)
    for wanted in job.learners:
        warm_up(learner_settings(settings, wanted, job.strengths[0]))
    fits = [
        fit for strength in job.strengths for fit in _at_strength(settings, job, strength, held, judge, tell)
    ]
    windows = [
        windows_of(settings, held, job, known, strength, tell) for strength in job.strengths if job.windows
    ]
    return {
        "program": version("bedload"),
        "log": about
        | {
            "messages": job.messages,
            "fresh": job.fresh,
            "labelled": held.row_after(job.messages),
            "rejected": held.rejected,
            "base_rate": float(held.part(0, job.messages).labels.mean()),
            "tokens": len(held.rows.columns),
            "different_tokens": len(held.addresses),
        },
        "settings": settings.model_dump(mode="json"),
        "batch": job.solver,
        "epochs": job.epochs,
        "has_truth": known is not None,
        "learners": [wanted.to_json(job.learners) for wanted in job.learners],
        "strengths": list(job.strengths),
        "fits": fits,
        "slopes": list(_slopes(fits)),
        "windows": windows,
        "seconds": time.monotonic() - began,
    }


def _at_strength(
    settings: Settings, job: Job, strength: float, held: Held, judge: Judge, tell: Tell
) -> Iterator[dict[str, Any]]:
    """A batch fit and all learners at each cut."""
    passes = [
        followed(learner_settings(settings, wanted, strength), job.cuts, tell) for wanted in job.learners
    ]
    for i, cut in enumerate(job.cuts):
        rows = held.part(0, cut)
        tell(i / len(job.cuts), f"{job.solver}, strength {strength:g}")
        optimum = fitted(job.solver, rows, strength, len(held.addresses))
        batch = _of_batch(judge, optimum, cut)
        learned = []
        for wanted, one in zip(job.learners, passes, strict=True):
            runs = [(1, next(one))]
            if job.epochs > 1:
                own = learner_settings(settings, wanted, strength)
                runs.append((job.epochs, after_epochs(own, cut, job.epochs, tell)))
            learned += [
                wanted.to_json(job.learners)
                | {"epochs": epochs}
                | _learned(held, judge, batch, optimum, strength, found)
                for epochs, found in runs
            ]
        yield {
            "strength": strength,
            "messages": cut,
            "batch": batch,
            "learned": learned,
        }
    for one in passes:
        one.close()


def _of_batch(judge: Judge, optimum: Optimum, cut: int) -> dict[str, Any]:
    return {
        "objective": optimum.objective,
        "lower_bound": optimum.lower_bound,
        "proved_gap": optimum.proved_gap,
        "loose": optimum.loose,
        "seconds": optimum.fitted.seconds,
        **judge.figures(optimum.fitted, cut),
    }


def _learned(
    held: Held,
    judge: Judge,
    batch: dict[str, Any],
    optimum: Optimum,
    strength: float,
    found: Followed,
) -> dict[str, Any]:
    own = Fitted(held.dense(found.weights), found.weights.intercept, found.seconds)
    objective = judge.objective(held.part(0, found.messages), own, strength)
    figures = judge.figures(own, found.messages)
    loss = figures["fresh_log_loss"]
    return {
        "objective": objective,
        "gap": objective / optimum.objective - 1.0,
        "fresh_over_batch": None if loss is None else loss / batch["fresh_log_loss"] - 1.0,
        "against_batch": agreement(own.weights != 0, optimum.fitted.weights != 0).to_json(),
        "seconds": found.seconds,
        "learning_seconds": found.learning_seconds,
        **figures,
    }


def _slopes(fits: Sequence[dict[str, Any]]) -> Iterator[dict[str, Any]]:
    """The powers with which gap and excess fall, of each row that comes at every cut."""
    for strength in dict.fromkeys(fit["strength"] for fit in fits):
        some = [fit for fit in fits if fit["strength"] == strength]
        messages = [fit["messages"] for fit in some]
        for i, one in enumerate(some[0]["learned"]):
            row = {"strength": strength, "name": one["name"], "epochs": one["epochs"]}
            for of in SLOPES_OF:
                slope = slope_of(messages, [fit["learned"][i][of] for fit in some])
                if slope is not None:
                    yield row | {"of": of, **asdict(slope)}
        slope = slope_of(messages, [fit["batch"]["excess_log_loss"] for fit in some])
        if slope is not None:
            yield {
                "strength": strength,
                "name": None,
                "epochs": None,
                "of": SLOPES_OF[1],
                **asdict(slope),
            }
