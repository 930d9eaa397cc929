"""Logs in, the share of weights that each method keeps at equal progressive AUC out.

Each method goes through the log once for every learning rate and strength, each message predicted before it
is learned; the rate with the best AUC stands for the method. Along its strengths, from strong to weak up to
that AUC, the number of weights is interpolated, evenly on a log scale, at the AUC wanted. FTRL-Proximal and
truncated gradient are ours, as `bedload tune` runs them; adaptive forward-backward splitting is a plain pass.
"""

import json
import tempfile
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path

import numpy as np
from sklearn.metrics import roc_auc_score

from simulator import CourierFeed, write_log
from simulator.scenarios import SCENARIOS
from stream.decoding import Decoder
from stream.features import Batcher
from stream.runs.tuning import histograms
from stream.runs.tuning.first_pass import find_strongest
from stream.runs.tuning.grid import Grid, blocks_of, candidates
from stream.runs.tuning.trial import run_trial
from stream.sources import LogSource
from tests import test_batch_agreement as courier
from tests import test_flights as flying
from tests.evidence.forward_backward import forward_backward

__all__ = ["METHODS", "Curve", "Log", "compare"]

METHODS = ("ftrl", "truncated-gradient", "forward-backward")
RATES = {
    "ftrl": (0.05, 0.1, 0.2, 0.3, 0.5, 1.0),
    "truncated-gradient": (0.005, 0.01, 0.02, 0.05, 0.1, 0.2),
    "forward-backward": (0.05, 0.1, 0.2, 0.3, 0.5, 1.0),
}
BELOW = (0.001, 0.005, 0.02)
"""How far under the lowest of the methods' best AUCs they are compared."""
LOGS = (*SCENARIOS, "flights")
MESSAGES = 100_000
LAST_DAY = [b"12", b"31"]


@dataclass(frozen=True)
class Curve:
    """AUC and non-zero weights of a method at one rate, from the strongest strength to the weakest.

    `recent`: how many of these weights are of tokens that were just seen, as `Rows` has it.
    """

    rate: float
    auc: np.ndarray
    kept: np.ndarray
    recent: np.ndarray

    @property
    def best(self):
        return float(self.auc.max())

    def kept_at(self, auc):
        """NaN where it is not reached by a strength in the grid."""
        after = self.first_at(auc)
        if not self.auc[0] < auc <= self.best or not self.kept[after - 1] > 0:
            return float("nan")
        two = slice(after - 1, after + 1)
        return float(np.exp(np.interp(auc, self.auc[two], np.log(self.kept[two]))))

    def recent_at(self, auc):
        """Share of the weights, at the strongest strength that reaches the AUC."""
        after = self.first_at(auc)
        return self.recent[after] / self.kept[after]

    def first_at(self, auc):
        return int(np.argmax(self.auc >= auc))


class Log:
    """A log and what can be learned from it; `settings_of(method)` are settings that learn it."""

    def __init__(self, settings_of, strengths=24, span=1000.0):
        self.settings_of = settings_of
        self.facts = find_strongest(settings_of("ftrl"), lambda *_: None)
        self.grid = (strengths, span)

    @property
    def live(self):
        return self.facts.coordinates

    def best_of(self, method, rates=None):
        """The curve of the rate with the best AUC."""
        run = self._plainly if method == "forward-backward" else self._side_by_side
        return max((run(method, rate) for rate in rates or RATES[method]), key=lambda curve: curve.best)

    def lanes(self, settings, rate):
        strengths, span = self.grid
        return candidates(Grid(strengths, (rate,), span), settings.learner, self.facts)

    def _side_by_side(self, method, rate):
        settings = self.settings_of(method)
        lanes = self.lanes(settings, rate)
        trial = run_trial(settings, lanes, blocks_of(self.facts.messages), 1 << 33)
        auc = np.array([histograms.auc(trial.bins[0, lane]) for lane in range(len(lanes))])
        kept, rows = trial.weights.values != 0, self.rows
        recent = rows.recent[np.searchsorted(rows.addresses, trial.weights.addresses)]
        return Curve(rate, auc, trial.nnz, kept[recent].sum(axis=0))

    def _plainly(self, _, rate):
        rows, auc, kept, recent = self.rows, [], [], []
        for lane in self.lanes(self.settings_of("ftrl"), rate):
            margins, weights = forward_backward(
                rows.ends, rows.columns, rows.values, rows.labels, self.live, rate, lane.l1_per_example
            )
            auc.append(roc_auc_score(rows.labels, margins))
            kept.append(weights.sum())
            recent.append((weights & rows.recent).sum())
        return Curve(rate, np.array(auc), np.array(kept), np.array(recent))

    @cached_property
    def rows(self):
        """The log as the learner sees it."""
        settings = self.settings_of("ftrl")
        source = LogSource(settings.feed.paths, settings.folder, settings.feed.max_line_bytes)
        decoder, batcher, parts = Decoder(settings), Batcher(settings), []
        while len(block := source.read(4096)):
            batch, _ = batcher.batch(decoder.decode(block)[0])
            columns = (np.diff(batch.row_ptr), batch.addresses, batch.values, batch.labels)
            parts.append([column.copy() for column in columns])
        source.close()
        return Rows(*map(np.concatenate, zip(*parts, strict=True)))


class Rows:
    """Messages as sparse rows whose columns are numbered by ascending address.

    `ends` int64[m + 1], `columns` int32[nnz], `values` float32[nnz], `labels` int8[m]; `addresses` uint64[n],
    and `recent` bool[n], whether a column was seen less than a tenth of its mean gap ago. By chance it is so
    for one weight in ten, or fewer, since gaps are whole messages.
    """

    def __init__(self, lengths, addresses, values, labels):
        self.addresses, columns = np.unique(addresses, return_inverse=True)
        self.ends = np.append(0, np.cumsum(lengths))
        self.columns, self.values, self.labels = columns.astype(np.int32), values, labels
        seen, last = np.bincount(self.columns), np.zeros(len(self.addresses), np.int64)
        np.maximum.at(last, self.columns, np.repeat(np.arange(len(labels)), lengths))
        self.recent = (len(labels) - last) * seen < 0.1 * len(labels)


def courier_log(folder, scenario, messages=MESSAGES, strengths=24):
    path = Path(folder) / f"{scenario}.jsonl"
    write_log(CourierFeed(seed=1, messages=messages, scenario=scenario), path)
    return Log(lambda method: courier.settings_for(path, method=method), strengths)


def flights_log(folder):
    path = Path(folder) / "flights.jsonl"
    with path.open("w", encoding="utf-8") as out:
        out.writelines(json.dumps(flying.message(row)) + "\n" for row in flying.flights())
    return Log(lambda method: flying.settings_for(path, method=method), span=30_000.0)


def compare():
    """Prints, for each log and AUC, what share of the live weights each method keeps."""
    with tempfile.TemporaryDirectory() as folder:
        for name in LOGS:
            log = flights_log(folder) if name == "flights" else courier_log(folder, name)
            curves = [log.best_of(method) for method in METHODS]
            bests = (
                f"{method} {curve.best:.4f} at rate {curve.rate:g}, {curve.kept[0]:,} at the strongest"
                for method, curve in zip(METHODS, curves, strict=True)
            )
            print(f"{name}, {log.live:,} live; best AUC: {'; '.join(bests)}")
            for below in BELOW:
                auc = min(curve.best for curve in curves) - below
                _show(curves, auc, log.live)
                if name == "flights":
                    _show_past(log, curves, auc)


def _show(curves, auc, live):
    """Shares of the live weights; in brackets, how many of them are of tokens just seen."""
    kept = [curve.kept_at(auc) for curve in curves]
    shares = (
        f"{weights / live:.2%} ({curve.recent_at(auc):.0%})"
        for weights, curve in zip(kept, curves, strict=True)
    )
    less = f"{kept[0] / kept[1]:.3f} and {kept[0] / kept[2]:.3f}"
    print(f"  at {auc:.4f}: {', '.join(shares)}; FTRL keeps {less} of the others", flush=True)


def _show_past(log, curves, auc):
    """Of the weights of our two methods, how many are of crosses with a day gone by."""
    for method, curve in zip(METHODS[:2], curves, strict=False):
        settings = log.settings_of(method)
        lane = log.lanes(settings, curve.rate)[curve.first_at(auc)]
        names = run_trial(settings, [lane], blocks_of(log.facts.messages), 1 << 33).weights.names
        dated = [name.split(b"\x1f")[1:3] for name in names if name.startswith(b"month&day")]
        past = sum(date != LAST_DAY for date in dated) / len(names)
        print(f"    {method}: {past:.0%} of its {len(names):,} weights name a day gone by", flush=True)
