"""An exhaustive search over the flights, by a plain pass that shares no code with stream.

`python -m tests.flights_search`, some minutes of one core; what the choice of `bedload tune` is held against
(docs/tuning.md). Tokens are numbered, not hashed; the pass is Algorithm 1 of McMahan et al., KDD 2013, with a
penalty that grows by `strength` an example. Every pair of learning rate and strength is a pass of its own, in
the order of the flights, each predicted before it is learned.
"""

from math import exp, log1p, sqrt

import numpy as np
from numba import njit

from tests.test_flights import CROSSES, FIELDS, FIRST, flights, message

RATES = (0.05, 0.1, 0.15, 0.2, 0.25, 0.3, 0.35, 0.4, 0.5, 0.6, 0.7, 0.85, 1.0, 1.5, 2.0)
STRENGTHS = tuple(float(strength) for strength in np.geomspace(1e-4, 1e-7, 61))


def numbered_tokens():
    """Tokens as int32[flights, 17], numbered from 0, and labels as bool[flights]."""
    numbers, rows, labels = {}, [], []
    for flight in map(message, flights()):
        tokens = [
            *((field, flight[field]) for field in FIELDS),
            *((c, *(flight[f] for f in c)) for c in CROSSES),
        ]
        rows.append([numbers.setdefault(token, len(numbers)) for token in tokens])
        labels.append(flight["late"])
    return np.array(rows, np.int32), np.array(labels)


@njit
def one_pass(rows, labels, first, rate, strength):
    """Mean log loss of the rows from `first` on, and how many weights are not zero after the last."""
    count = rows.max() + 1
    z, n, w = np.zeros(count + 1), np.zeros(count + 1), np.zeros(count + 1)
    loss = 0.0
    for i in range(len(rows)):
        margin = 0.0
        for j in rows[i]:
            w[j] = weight(z[j], n[j], rate, strength * i)
            margin += w[j]
        w[count] = weight(z[count], n[count], rate, 0.0)  # the intercept, free
        margin += w[count]
        p = 1 / (1 + exp(-margin))
        if i >= first:
            loss += log1p(exp(-margin)) if labels[i] else log1p(exp(margin))
        g = p - labels[i]
        for j in rows[i]:
            learn(z, n, w, j, g, rate)
        learn(z, n, w, count, g, rate)
    kept = 0
    for j in range(count):
        kept += weight(z[j], n[j], rate, strength * len(rows)) != 0
    return loss / (len(rows) - first), kept


@njit
def weight(z, n, rate, penalty):
    if abs(z) <= penalty:
        return 0.0
    return -(z - penalty * np.sign(z)) * rate / (1 + sqrt(n))


@njit
def learn(z, n, w, j, g, rate):
    z[j] += g - (sqrt(n[j] + g * g) - sqrt(n[j])) / rate * w[j]
    n[j] += g * g


def main():
    rows, labels = numbered_tokens()
    found = []
    for rate in RATES:
        own = [(*one_pass(rows, labels, FIRST, rate, strength), rate, strength) for strength in STRENGTHS]
        loss, kept, _, strength = min(own)
        print(
            f"learning rate {rate:g}: log loss {loss:.5f} with {kept:,} weights at {strength:.4g}", flush=True
        )
        found += own
    loss, kept, rate, strength = min(found)
    print(f"best of {len(found)}: log loss {loss:.5f} with {kept:,} weights, {rate:g}, {strength:.4g}")


if __name__ == "__main__":
    main()
