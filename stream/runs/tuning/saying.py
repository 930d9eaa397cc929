"""A choice in, plain sentences out: the rule, what was chosen, the runner-up, what is given up, cautions."""

from __future__ import annotations

from stream.reports.texts import count, difference, loss, plain, size
from stream.runs.tuning.choosing import Candidates, Choice, Difference

__all__ = ["cautions", "said"]

FEW_BLOCKS = 20
"""Blocks below which a standard error is itself too uncertain to lean on."""


def said(candidates: Candidates, choice: Choice) -> list[str]:
    """The rule, the choice, what it gives up, the runner-up, and whether half as many weights were tried."""
    blocks = len(candidates.weight)
    lines = [
        _rule(candidates, choice),
        f"Chosen: {_named(candidates, choice.index)}, with {_weights(candidates, choice.index)} and a log "
        f"loss of {loss(float(candidates.log_loss[choice.index]))} over the last part of the log.",
    ]
    if choice.index != choice.best:
        lines.append(_given_up(candidates, choice))
    lines.append(_runner_up(candidates, choice))
    if choice.halved is None and candidates.nnz[choice.index]:
        lines.append("No candidate has half as many weights or fewer.")
    lines.append(
        f"± is one standard error of the difference, from {count(blocks)} time {_plural('block', blocks)} in "
        "which both met the same messages."
    )
    return lines


def cautions(candidates: Candidates, choice: Choice) -> list[str]:
    """What a person should know before leaning on the choice."""
    lines = []
    blocks = len(candidates.weight)
    if blocks < FEW_BLOCKS:
        lines.append(
            f"Labelled messages stand in only {blocks} time {_plural('block', blocks)} of the last part; "
            f"standard errors from fewer than {FEW_BLOCKS} are rough."
        )
    return lines + _at_the_edge(candidates, choice)


def _at_the_edge(candidates: Candidates, choice: Choice) -> list[str]:
    """Where the lowest log loss lies at an end of what was tried, so that a better one may lie beyond."""
    lines = []
    strengths = [candidates.strength(i) for i in range(len(candidates.lanes))]
    rates = [lane.learning_rate for lane in candidates.lanes]
    strength, rate = strengths[choice.best], rates[choice.best]
    if not candidates.nnz[choice.best]:
        lines.append("The lowest log loss is that of a model without any weight: no token helped.")
    elif 0 < strength == min(strengths) < max(strengths):
        lines.append(_beyond("weakest strength", strength, "weaker"))
    elif strength == max(strengths) > min(strengths):
        lines.append(_beyond("strongest strength", strength, "stronger"))
    if rate == min(rates) < max(rates):
        lines.append(_beyond("smallest learning rate", rate, "smaller"))
    elif rate == max(rates) > min(rates):
        lines.append(_beyond("largest learning rate", rate, "larger"))
    return lines


def _beyond(end: str, value: float, more: str) -> str:
    tried = f"the {end} that was tried ({plain(value)})"
    return f"The lowest log loss is at {tried}: {more} ones may be better still."


def _rule(candidates: Candidates, choice: Choice) -> str:
    limit = choice.rule.limit
    lanes = len(candidates.lanes)
    of = f"of {count(lanes)} {_plural('candidate', lanes)}"
    match choice.rule.pick:
        case "lowest_loss":
            return f"Rule: the lowest log loss {of}."
        case "max_weights":
            return (
                f"Rule: the lowest log loss with at most {count(limit)} non-zero weights; "
                f"{count(choice.qualified)} {of} keep to that."
            )
        case "max_bytes":
            return (
                f"Rule: the lowest log loss with a snapshot of at most {size(limit)}; "
                f"{count(choice.qualified)} {of} keep to that."
            )
    text = f"Rule: the fewest weights within one standard error of the lowest log loss {of}."
    if choice.index == choice.best:
        text += " No sparser candidate qualifies, so the one with the lowest log loss is taken."
    return text


def _given_up(candidates: Candidates, choice: Choice) -> str:
    more = int(candidates.nnz[choice.index] - candidates.nnz[choice.best])
    best = f"{_named(candidates, choice.best)}, {_weights(candidates, choice.best)}"
    loses = _nats(choice.given_up)
    return f"Against the lowest log loss ({best}) it has {_more(more)} and loses {loses} nats a message."


def _runner_up(candidates: Candidates, choice: Choice) -> str:
    other = choice.runner_up
    if other is None:
        return "There is no runner-up: no other candidate qualifies."
    more = int(candidates.nnz[other] - candidates.nnz[choice.index])
    return (
        f"Runner-up: {_named(candidates, other)}, with {_more(more)}; it would change the log loss by "
        f"{_nats(candidates.difference(other, choice.index))} nats a message."
    )


def _named(candidates: Candidates, index: int) -> str:
    rate = plain(candidates.lanes[index].learning_rate)
    return f"{candidates.over} {plain(candidates.strength(index))} at learning rate {rate}"


def _weights(candidates: Candidates, index: int) -> str:
    nnz = int(candidates.nnz[index])
    return f"{count(nnz)} non-zero {_plural('weight', nnz)}"


def _more(number: int) -> str:
    if not number:
        return "as many weights"
    return f"{count(abs(number))} {'more' if number > 0 else 'fewer'} {_plural('weight', abs(number))}"


def _nats(found: Difference) -> str:
    return difference(found.nats, found.error)


def _plural(word: str, number: int) -> str:
    return word if number == 1 else f"{word}s"
