"""Small logs as dense problems, a batch solver that shares nothing with ours, snapshots of given weights."""

import json
from pathlib import Path

import numpy as np
from scipy.optimize import minimize
from scipy.sparse import csr_matrix
from scipy.special import expit

from stream.decoding import Decoder
from stream.features import Batcher
from stream.settings import Settings
from stream.snapshots import Snapshot
from stream.snapshots.layout import About
from stream.sources import LogSource
from stream.weights import Weights

SMALL = {
    "message": {"label": "late", "weight": "counts", "max_reject_share": 1.0},
    "fields": [
        {"path": "load", "kind": "quantity"},
        {"path": "depth", "kind": "quantity"},
        {"path": "void", "kind": "quantity"},
        {"path": "bank", "kind": "category"},
        {"path": "codes", "kind": "list"},
    ],
}


def settings_of(path, base=SMALL, **sections):
    return Settings.model_validate({**base, **sections, "feed": {"paths": [str(path)]}})


def write(path, messages):
    path.write_text("".join(json.dumps(message) + "\n" for message in messages))
    return path


class Problem:
    """The labelled messages of a log: X csr[m, n], labels y and weights o, n addresses ascending, n names."""

    def __init__(self, settings, path):
        source = LogSource((str(path),), Path(), settings.feed.max_line_bytes)
        decoder, batcher = Decoder(settings), Batcher(settings)
        rows, labels, weights, texts = [], [], [], {}
        while len(block := source.read(4096)):
            batch, _ = batcher.batch(decoder.decode(block)[0])
            for i, (begin, end) in enumerate(zip(batch.row_ptr, batch.row_ptr[1:], strict=False)):
                addresses = batch.addresses[begin:end].tolist()
                texts.update({a: batch.text(int(begin) + k) for k, a in enumerate(addresses)})
                if batch.labels[i] >= 0:
                    rows.append((addresses, batch.values[begin:end].astype(float)))
                    labels.append(int(batch.labels[i]))
                    weights.append(float(batch.weights[i]))
        self.addresses = np.array(sorted(texts), np.uint64)
        self.names = tuple(texts[a] for a in self.addresses.tolist())
        self.y, self.o = np.array(labels, float), np.array(weights)
        lengths = [len(row[0]) for row in rows]
        held = np.concatenate([np.array(row[0], np.uint64) for row in rows])
        columns = np.searchsorted(self.addresses, held)
        ends = np.concatenate([[0], np.cumsum(lengths)])
        values = np.concatenate([row[1] for row in rows])
        self.X = csr_matrix((values, columns, ends), (len(rows), len(texts)))

    def loss(self, w, b):
        """Mean loss, and its gradient in w and b."""
        margins = self.X @ w + b
        pulls = self.o * (expit(margins) - self.y) / self.o.sum()
        losses = np.logaddexp(0.0, np.where(self.y == 1, -margins, margins))
        return float(self.o @ losses / self.o.sum()), self.X.T @ pulls, float(pulls.sum())

    def strongest(self):
        """lambda_max: from there on all weights are zero."""
        mean = self.o @ self.y / self.o.sum()
        return float(np.abs(self.X.T @ (self.o * (self.y - mean))).max() / self.o.sum())

    def intercept_for(self, w):
        """The best one, found by halving."""
        low, high = -2e3, 2e3
        for _ in range(70):
            middle = (low + high) / 2
            low, high = (middle, high) if self.loss(w, middle)[2] < 0 else (low, middle)
        return (low + high) / 2

    def objective(self, w, strength):
        """With the best intercept."""
        return self.loss(w, self.intercept_for(w))[0] + strength * np.abs(w).sum()

    def optimum(self, strength, start=None):
        """Weights as the difference of two non-negative vectors, by SciPy's L-BFGS-B."""
        n = self.X.shape[1]
        w = np.zeros(n) if start is None else start
        first = np.concatenate([np.maximum(w, 0), np.maximum(-w, 0), [self.intercept_for(w)]])

        def value(v):
            loss, slope, pull = self.loss(v[:n] - v[n : 2 * n], v[-1])
            gradient = np.concatenate([slope + strength, strength - slope, [pull]])
            return loss + strength * v[:-1].sum(), gradient

        bounds = [(0, None)] * (2 * n) + [(None, None)]
        options = {"maxiter": 1_500, "maxfun": 3_000, "ftol": 1e-15, "gtol": 1e-10, "maxcor": 30}
        found = minimize(value, first, jac=True, method="L-BFGS-B", bounds=bounds, options=options).x
        return found[:n] - found[n : 2 * n]

    def snapshot(self, settings, w, intercept=0.0, learned=None, names=None):
        """A snapshot of the weights, as float32, without the zeros."""
        some = np.flatnonzero(w.astype(np.float32))
        known = names if names is not None else tuple(self.names[i] for i in some)
        weights = Weights(
            self.addresses[some],
            w[some].astype(np.float32),
            known,
            np.zeros(len(some)),
            intercept,
            len(self.y) if learned is None else learned,
            settings.fingerprint(),
        )
        return Snapshot(Path("drawn"), len(self.y), weights, About(settings.model_dump(mode="json")))
