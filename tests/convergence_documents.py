"""Documents of `converge` for tests of its report, invented: whole, of a bare log, and of one look alone."""

from stream.runs.converging.slopes import slope_of

__all__ = ["bare", "nasty", "single", "whole"]

METHODS = ("ftrl", "truncated-gradient")
CUTS = (1_000, 3_000, 10_000, 30_000)


def whole():
    """Two strengths, four looks, a known truth, six windows."""
    strengths = [4e-4, 7e-5]
    fits = [_fit(strength, cut, True) for strength in strengths for cut in CUTS]
    return _document(strengths, fits, True, [_windows(strength, True) for strength in strengths])


def bare():
    """A log of one's own: no truth, no windows, one pass."""
    document = _document([1e-4], [_fit(1e-4, cut, False) for cut in CUTS], False, [])
    document["log"] |= {"scenario": None, "files": ["handoffs.jsonl"]}
    document["epochs"] = 1
    document["slopes"] = [slope for slope in document["slopes"] if slope["epochs"] == 1]
    for fit in document["fits"]:
        fit["learned"] = [one for one in fit["learned"] if one["epochs"] == 1]
    return document


def single():
    """One look, at which nothing was kept, and without windows."""
    fit = _fit(0.5, 500, True)
    for one in (fit["batch"], *fit["learned"]):
        one |= {"nnz": 0, "against_truth": {"precision": None, "recall": 0.0, "f1": None}}
    for one in fit["learned"]:
        one |= {"gap": 0.0, "against_batch": {"precision": None, "recall": None, "f1": None}}
    return _document([0.5], [fit], True, [])


def nasty():
    """Texts that want to be markup."""
    document = bare()
    document["log"]["files"] = ["<img src=x onerror='window.hurt=1'>.jsonl", "\u202egnp.jsonl"]
    document["command"] = "bedload converge '<script>window.hurt=1</script>'"
    return document


def _fit(strength, cut, truth):
    learned = [_learned(method, epochs, strength, cut, truth) for method in METHODS for epochs in (1, 5)]
    return {
        "strength": strength,
        "messages": cut,
        "batch": {
            "objective": 0.43 + 10 * strength,
            "lower_bound": (0.43 + 10 * strength) * (1 - 2e-5),
            "proved_gap": 2e-5,
            "loose": False,
            "seconds": cut / 3_000,
            **_figures(cut, 120, truth),
        },
        "learned": learned,
    }


def _learned(method, epochs, strength, cut, truth):
    worse = (1 if method == "ftrl" else 6) / epochs
    gap = 40 * worse * cut**-0.8
    return {
        "name": method,
        "method": method,
        "learning_rate": 0.2,
        "averaged": False,
        "epochs": epochs,
        "objective": (0.43 + 10 * strength) * (1 + gap),
        "gap": gap,
        "fresh_over_batch": 0.004 * worse,
        "against_batch": {"precision": 0.8, "recall": 0.9, "f1": 0.847},
        "seconds": epochs * cut / 50_000,
        "learning_seconds": epochs * cut / 500_000,
        **_figures(cut, 150, truth),
    }


def _figures(cut, nnz, truth):
    return {
        "nnz": nnz,
        "fresh_log_loss": 0.42 + cut**-0.5,
        "excess_log_loss": cut**-0.6 if truth else None,
        "against_truth": {"precision": 0.5, "recall": 0.4, "f1": 0.444} if truth else None,
    }


def _windows(strength, truth):
    losses = [0.47, 0.45, 0.44, 0.46, 0.45, 0.44]
    lower, higher = [loss - 0.02 for loss in losses], [None, *(loss + 0.01 for loss in losses[1:])]
    return {
        "strength": strength,
        "through": [5_000 * (i + 1) for i in range(6)],
        "base_rate": [0.2] * 6,
        "truth": lower if truth else None,
        "learners": [{"name": m, "learning_rate": 0.2, "losses": losses} for m in METHODS],
        "batch": {"hindsight": lower, "all_before": higher, "last_window": higher},
        "means": {
            "truth": 0.42 if truth else None,
            "learners": [0.44, 0.45],
            "batch": {"hindsight": 0.43, "all_before": 0.45, "last_window": 0.46},
        },
    }


def _document(strengths, fits, truth, windows):
    slopes = []
    for strength in strengths:
        some = [fit for fit in fits if fit["strength"] == strength]
        for i in range(4):
            slope = slope_of([f["messages"] for f in some], [f["learned"][i]["gap"] for f in some])
            if slope is not None:
                slopes.append(
                    {
                        "strength": strength,
                        "name": some[0]["learned"][i]["name"],
                        "epochs": some[0]["learned"][i]["epochs"],
                        "of": "gap",
                        "exponent": slope.exponent,
                        "error": slope.error,
                        "factor": slope.factor,
                        "points": slope.points,
                    }
                )
    return {
        "program": "0.1.0",
        "command": "bedload converge",
        "log": {
            "files": [],
            "scenario": {"scenario": "steady", "seed": 0, "messages": 50_000},
            "messages": fits[-1]["messages"],
            "fresh": 20_000,
            "labelled": fits[-1]["messages"],
            "rejected": 0,
            "base_rate": 0.21,
            "tokens": 500_000,
            "different_tokens": 16_000,
        },
        "settings": {"learner": {"method": "ftrl", "learning_rate": 0.1}},
        "batch": "liblinear",
        "epochs": 5,
        "has_truth": truth,
        "learners": [{"name": method, "learning_rate": 0.2} for method in METHODS],
        "strengths": strengths,
        "fits": fits,
        "slopes": slopes,
        "windows": windows,
        "seconds": 12.5,
    }
