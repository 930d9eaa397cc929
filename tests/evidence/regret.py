"""Spambase in one pass of truncated gradient in, what it lost and what the published bound allows out.

Langford, Li, Zhang, JMLR 10 (2009), theta infinite, K = 1, |x| <= C (from memory, no text at hand), for every
fixed w, T examples in any order, L the logistic loss:

    mean(L(w_i) + g |w_{i+1}|_1)  <=  eta C^2 / 2 + |w|^2 / (2 eta T) + mean(L(w) + g |w|_1)

w_i are the weights before example i. |w|^2 and C^2 count the intercept, which has value 1 and no gravity.
"""

from dataclasses import dataclass

import numpy as np
from scipy.optimize import minimize
from scipy.special import expit

from stream.batch import Batch
from stream.learners import Learner
from stream.settings.models import Learner as Settings
from tests.evidence.references import by_bedload, strongest
from tests.spambase import spambase_or_skip

__all__ = ["GRAVITIES", "ORDERS", "RATES", "Feed", "Pass", "compare"]

RATES = (1e-5, 1e-4, 1e-3, 1e-2, 1e-1)
GRAVITIES = (0.0, 0.001, 0.01, 0.1, 0.5)
"""As shares of the gravity from which on the batch optimum has no weight."""
ORDERS = ("shuffled", "spam first")


@dataclass(frozen=True)
class Pass:
    """`losses` L(w_i) and `norms` |w_{i+1}|_1 of each example; `last` weights, intercept last."""

    losses: np.ndarray
    norms: np.ndarray
    last: np.ndarray

    def lost(self, gravity):
        return float(np.mean(self.losses + gravity * self.norms))


class Feed:
    """Rows of Spambase in some order, float32[m, n] as a learner sees them."""

    def __init__(self, order):
        x, y, _ = spambase_or_skip()
        rows = np.arange(len(y)) if order == "spam first" else np.random.default_rng(0).permutation(len(y))
        assert y[:100].all() and not y[-100:].any(), "the file has spam first"
        self.x, self.y = x[rows].astype(np.float32), y[rows]
        self.exact = self.x.astype(float)
        self.squared = float((self.exact**2).sum(axis=1).max() + 1)
        most = strongest(self.exact, self.y)
        self.gravities = [share * most for share in GRAVITIES]
        optima = by_bedload(self.exact, self.y, self.gravities[:0:-1], tolerance=1e-6)
        self.optima = [np.append(one.weights, one.intercept) for one in optima]

    def learn(self, rate, gravity):
        """By the kernel, over an array in which column j is row j of the table."""
        m, n = self.x.shape
        learner = Learner(Settings(method="truncated-gradient", learning_rate=rate, l1_per_example=gravity))
        cells = np.zeros(4 * n, np.uint64)
        cells[::4] = 1
        batch, slots = self._batch(), np.tile(np.arange(n), m)
        margins, norms = np.empty(m), np.empty(m)
        for i in range(m):
            margins[i] = learner.predict_then_update(cells, batch, slots, i, i + 1)[0][i]
            norms[i] = np.abs(learner.weights(cells, 0, n)).sum()
        return self.passed(margins, norms, np.append(learner.weights(cells, 0, n), learner.intercept))

    def passed(self, margins, norms, last):
        return Pass(np.logaddexp(0.0, np.where(self.y, -margins, margins)), norms, last)

    def _batch(self):
        m, n = self.x.shape
        texts = np.zeros(m * n, np.int64)
        return Batch(
            row_ptr=np.arange(0, m * n + 1, n),
            addresses=np.tile(np.arange(n, dtype=np.uint64), m),
            values=self.x.ravel(),
            labels=self.y.astype(np.int8),
            weights=np.ones(m),
            texts=np.zeros(1, np.uint8),
            text_starts=texts,
            text_lengths=texts.astype(np.int32),
        )

    def allowed(self, rate, gravity, fixed):
        """The right side for fixed weights, intercept last."""
        loss, _ = self._loss(fixed)
        distance = fixed @ fixed / (2 * rate * len(self.y))
        return rate * self.squared / 2 + distance + loss + gravity * np.abs(fixed[:-1]).sum()

    def _loss(self, fixed):
        """Mean loss and its gradient."""
        margins = self.exact @ fixed[:-1] + fixed[-1]
        pulls = (expit(margins) - self.y) / len(self.y)
        losses = np.logaddexp(0.0, np.where(self.y, -margins, margins))
        return float(losses.mean()), np.append(self.exact.T @ pulls, pulls.sum())

    def tightest(self, rate, gravity):
        """Fixed weights at which the right side is least, nearly: by L-BFGS-B, each as a difference."""
        n, bend = self.x.shape[1] + 1, 1 / (rate * len(self.y))
        presses = np.append(np.full(n - 1, gravity), 0.0)

        def value(v):
            fixed = v[:n] - v[n:]
            loss, slope = self._loss(fixed)
            slope = slope + bend * fixed
            right = loss + bend * fixed @ fixed / 2 + presses @ (v[:n] + v[n:])
            return right, np.concatenate([slope + presses, presses - slope])

        options = {"maxiter": 40}
        bounds = [(0, None)] * 2 * n
        found = minimize(value, np.zeros(2 * n), jac=True, method="L-BFGS-B", bounds=bounds, options=options)
        return found.x[:n] - found.x[n:]

    def fixed(self, rate, gravity, last):
        """Weights to hold a pass against: batch optima, none, its own last ones and others."""
        nothing = np.zeros(len(last))
        others = [nothing, last, last / 2, -self.optima[0], self.tightest(rate, gravity)]
        return [*self.optima, *others]


def compare():
    """Prints what was lost beside the least that the bound allows, for each rate, gravity and order."""
    for order in ORDERS:
        feed = Feed(order)
        print(f"{order}, C^2 = {feed.squared:.1f}, T = {len(feed.y):,}: lost / least that is allowed")
        for rate in RATES:
            cells = []
            for gravity in feed.gravities:
                found = feed.learn(rate, gravity)
                fixed = feed.fixed(rate, gravity, found.last)
                least = min(feed.allowed(rate, gravity, one) for one in fixed)
                cells.append(f"{found.lost(gravity):8.4f} /{least:8.4f}")
            print(f"{rate:8g}", *cells, flush=True)
