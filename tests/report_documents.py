"""Invented tuning documents: what `bedload tune` might say of a courier depot, and odd ones."""

import copy
import math
import random

WORDS = [
    "gate",
    "later",
    "dog",
    "missing",
    "porter",
    "mailroom",
    "caretaker",
    "lift",
    "code",
    "intercom",
    "floor",
    "barking",
    "card",
    "slot",
    "full",
    "third",
    "receptionist",
    "signed",
    "neighbour",
    "stairs",
    "parcel",
    "shutter",
    "closed",
    "ramp",
    "alley",
    "keypad",
    "lobby",
    "annexe",
    "hatch",
    "buzzer",
]
PLACES = [*(("route", f"R{i:02}") for i in (2, 8, 32, 1, 20)), ("stop", "flat"), ("stop", "school")]
PLACES += [("hour", "15"), ("hour", "17"), ("hour", "8")]
NASTY = (
    "</script><script>window.hurt=1</script>",
    '<img src=x onerror="window.hurt=1">',
    "<a href='javascript:window.hurt=1'>%{x}",
    "باب المدخل",
    "\u202egnirts",
    "x" * 300,
    "line\u2028and\u2029paragraph",
    "\x00\x1b[31m\ud800",
    "&lt;b&gt;&amp;",
    "$\\alpha$",
)


def tuned(strengths=32, rates=(0.05, 0.1, 0.3), blocks=80, messages=200_000):
    """A whole document, drawn from a fixed state, so the same each time."""
    draw = random.Random(4)
    grid = [0.03 * 10 ** (-3.2 * i / max(1, strengths - 1)) for i in range(strengths)]
    ends = [messages * (i + 1) // blocks for i in range(blocks)]
    waves = [0.02 * math.sin(i / 6) + draw.gauss(0, 0.006) for i in range(blocks)]
    candidates = [
        _candidate(r * strengths + s, rate, strength, s / max(1, strengths - 1), waves)
        for r, rate in enumerate(rates)
        for s, strength in enumerate(grid)
    ]
    best = min(candidates, key=lambda c: c["log_loss"])
    for c in candidates:
        c["difference"] = c["log_loss"] - best["log_loss"]
        c["log_loss_se"] = 0.0 if c is best else 0.00012 + 0.06 * c["difference"]
    own = [c for c in candidates if c["learning_rate"] == best["learning_rate"]]
    at = own.index(best)
    choice = own[max(0, at - 3)]
    names = [*PLACES, *(("note", word) for word in WORDS)]
    tokens = [_token(field, word, rank, grid, draw) for rank, (field, word) in enumerate(names)]
    halved = next((c for c in reversed(own) if c["nnz"] <= choice["nnz"] / 2), own[0])
    return {
        "format": "bedload tuning",
        "format_version": 1,
        "program": "0.1.0",
        "command": "bedload tune --config bedload.toml --out report --pick sparsest_within_one_se",
        "settings": {
            "feed": {"kind": "log", "paths": ["handoffs/*.jsonl"]},
            "fields": [{"path": "note", "kind": "words"}, {"path": "route", "kind": "category"}],
            "learner": {"method": "ftrl", "learning_rate": 0.1, "l1_per_example": 0.0001, "l2": 0.0},
        },
        "log": {
            "files": ["handoffs/1.jsonl", "handoffs/2.jsonl.zst"],
            "digest": "3f" * 32,
            "messages": messages,
            "labelled": messages - messages // 100,
            "rejected": 12,
            "base_rate": 0.2136,
            "first_time": "2031-03-03T06:01:12Z",
            "last_time": "2031-03-12T19:58:40Z",
        },
        "grid": {
            "unit": "l1_per_example",
            "strongest": grid[0],
            "searched": True,
            "strengths": grid,
            "learning_rates": list(rates),
        },
        "blocks": {"messages": ends, "last_part_from": blocks * 7 // 10},
        "candidates": candidates,
        "choice": {
            "rule": "sparsest_within_one_se",
            "index": choice["index"],
            "best": best["index"],
            "runner_up": own[max(0, at - 2)]["index"],
            "said": [
                f"It keeps {choice['nnz']:,} weights, {best['nnz'] - choice['nnz']:,} fewer than the best.",
                f"Taken instead of the best it gives up {choice['difference']:.5f} nats a message.",
            ],
            "halved": {
                "index": halved["index"],
                "nnz": halved["nnz"],
                "log_loss_more": halved["log_loss"] - choice["log_loss"],
                "log_loss_se": 0.0004,
            },
        },
        "paths": {"learning_rate": choice["learning_rate"], "strengths": grid, "tokens": tokens},
        "models": [_model(c, i, tokens, draw) for i, c in enumerate(own)],
        "reliability": _reliability(draw),
        "thresholds": {"messages_per_day": 20_000.0, "rows": _thresholds()},
        "slices": {"by": "route", "rows": [_slice(i, draw) for i in range(36)]},
        "strongest": {
            "towards_yes": _strongest(tokens, own.index(choice), 1, 25, draw),
            "towards_no": _strongest(tokens, own.index(choice), -1, 25, draw),
        },
        "truth": {
            "planted": 120,
            "found": 84,
            "precision": 0.913,
            "recall": 0.7,
            "excess_log_loss": 0.00213,
            "best_excess_log_loss": 0.0019,
        },
        "warnings": ["The weakest strength still improves in the last blocks: try a wider span."],
        "passes": ["first pass: counts and the strongest end", "second pass: 96 models side by side"],
        "seconds": 12.3,
    }


def _candidate(index, rate, strength, t, waves):
    nnz = 0 if t == 0 else int(3 * 10 ** (3.6 * t))
    off = {0.05: 0.004, 0.1: 0.0, 0.3: 0.007}.get(rate, 0.002)
    log_loss = 0.44 + 0.078 * math.exp(-4.6 * t) + 0.011 * max(0.0, t - 0.62) ** 2 * 4 + off * min(1.0, 6 * t)
    learned = 0.05 * (1 + 2 * t)
    blocks = [
        log_loss + wave * (1 - 0.4 * t) + learned * math.exp(-i / (2 + 5 * t)) for i, wave in enumerate(waves)
    ]
    return {
        "index": index,
        "learning_rate": rate,
        "l1_per_example": strength,
        "l1": 0.0,
        "log_loss": log_loss,
        "log_loss_whole": sum(blocks) / len(blocks),
        "nnz": nnz,
        "bytes": 600 + 24 * nnz,
        "auc": 0.5 + 0.28 * (1 - math.exp(-5 * t)),
        "calibration_ratio": 1.0 + 0.02 * t,
        "normalised_entropy": log_loss / 0.5188,
        "forward_log_loss": None,
        "block_log_loss": blocks,
        "block_nnz": [int(nnz * (1 - math.exp(-(i + 1) / 12))) for i in range(len(blocks))],
    }


def _token(field, word, rank, grid, draw):
    enters = min(len(grid) - 1, int(rank * len(grid) * 0.75 / 40) + 1)
    final = draw.choice((-1, 1)) * (1.25 * math.exp(-rank / 22) + 0.08 * draw.random())
    weights = [
        0.0 if i < enters else final * (1 - math.exp(-(i - enters + 1) / (4 + rank % 5)))
        for i in range(len(grid))
    ]
    return {"field": field, "token": word, "share": 0.3 / (rank + 2) ** 1.2, "weights": weights}


def _strongest(tokens, at, sign, most, draw):
    found = [t for t in tokens if t["weights"][at] * sign > 0]
    found.sort(key=lambda t: -abs(t["weights"][at]))
    return [
        {
            "field": t["field"],
            "token": t["token"],
            "weight": t["weights"][at],
            "share": t["share"],
            "kept": round(min(1.0, 0.5 + 0.6 * draw.random()), 4),
        }
        for t in found[:most]
    ]


def _model(candidate, at, tokens, draw):
    return {
        "index": candidate["index"],
        "strength": candidate["l1_per_example"],
        "nnz": candidate["nnz"],
        "log_loss": candidate["log_loss"],
        "towards_yes": _strongest(tokens, at, 1, 10, draw),
        "towards_no": _strongest(tokens, at, -1, 10, draw),
    }


def _reliability(draw):
    counts = [9000, 21000, 14000, 7000, 3900, 2100, 1000, 420, 130, 20]
    bins = []
    for i, weight in enumerate(counts):
        predicted = (i + 0.45) / 10
        observed = min(
            1.0, max(0.0, predicted + draw.gauss(0, math.sqrt(predicted * (1 - predicted) / weight)))
        )
        bins.append(
            {
                "from": i / 10,
                "to": (i + 1) / 10,
                "predicted": predicted,
                "observed": observed,
                "weight": float(weight),
            }
        )
    return {"bins": bins, "calibration_ratio": 1.013, "expected_calibration_error": 0.0041}


def _thresholds():
    rows = []
    for i in range(200):
        threshold = 0.97 * (1 - i / 200) + 0.004
        flagged = math.exp(-6.2 * threshold)
        precision = min(0.95, 0.2136 + 0.75 * threshold)
        rows.append(
            {
                "threshold": threshold,
                "flagged": flagged,
                "precision": precision,
                "recall": min(1.0, flagged * precision / 0.2136),
            }
        )
    return rows


def _slice(i, draw):
    rate = 0.12 + 0.2 * draw.random()
    guess = -(rate * math.log(rate) + (1 - rate) * math.log(1 - rate))
    entropy = 0.78 + 0.2 * draw.random() if i != 7 else 1.03
    return {
        "slice": f"R{i:02}",
        "messages": 9000 // (1 + i // 3),
        "log_loss": guess * entropy,
        "base_rate": rate,
        "normalised_entropy": entropy,
    }


def bare():
    """One learning rate, no times, no slices, no truth, no budget, no warnings, undefined figures."""
    document = tuned(strengths=6, rates=(0.1,), blocks=20, messages=4000)
    document["log"] |= {"first_time": None, "last_time": None}
    document["choice"] |= {
        "rule": "lowest_loss",
        "index": document["choice"]["best"],
        "runner_up": None,
        "halved": None,
    }
    document["slices"] = {"by": None, "rows": []}
    document["thresholds"]["messages_per_day"] = None
    document["thresholds"]["rows"][0]["precision"] = None
    document |= {"truth": None, "warnings": [], "passes": []}
    document["reliability"] |= {"calibration_ratio": None, "expected_calibration_error": None}
    for candidate in document["candidates"]:
        candidate["block_log_loss"][:2] = [None, None]
        candidate |= {"auc": None, "calibration_ratio": None}
    return document


def empty():
    """A log that taught nothing: no token ever had a weight."""
    document = bare()
    document["paths"]["tokens"] = []
    document["strongest"] = {"towards_yes": [], "towards_no": []}
    document["thresholds"]["rows"] = []
    document["reliability"]["bins"] = []
    document["slices"] = {"by": "route", "rows": []}
    for model in document["models"]:
        model |= {"nnz": 0, "towards_yes": [], "towards_no": []}
    for candidate in document["candidates"]:
        candidate["nnz"] = 0
    return document


def nasty():
    """Every place that holds a text of the feed holds one that would break a careless page."""
    document = copy.deepcopy(tuned(strengths=8, rates=(0.1, 0.3)))
    for i, text in enumerate(NASTY):
        for token in (document["paths"]["tokens"][i], *_listed(document, i)):
            token |= {"field": text if i % 2 else "note", "token": text}
        document["slices"]["rows"][i]["slice"] = text
    document["slices"]["by"] = NASTY[1]
    document["log"]["files"] = list(NASTY)
    document["warnings"] = list(NASTY)
    document["choice"]["said"] = list(NASTY)
    document["passes"] = list(NASTY)
    document["command"] = " ".join(NASTY)
    document["settings"]["feed"]["paths"] = list(NASTY)
    document["settings"][NASTY[1]] = {NASTY[0]: 1}
    return document


def _listed(document, i):
    lists = [document["strongest"]["towards_yes"], document["strongest"]["towards_no"]]
    for model in document["models"]:
        lists += [model["towards_yes"], model["towards_no"]]
    return [tokens[i] for tokens in lists if i < len(tokens)]
