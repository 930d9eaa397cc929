"""Learners written from the papers: one example at a time, dicts of Python floats, nothing lazy or clever.

A row is a dict of index to value; a label is 0, 1 or None (scored, not learned). The intercept is a
coordinate of its own, of value 1 and without a penalty. Nothing here is shared with `stream`.
"""

import math


def sigmoid(margin):
    return 1 / (1 + math.exp(-margin)) if margin > -700 else math.exp(margin)


class Twin:
    """What both methods share: the margin, and the strength accumulated by learned examples."""

    def __init__(self, l1=0.0, l1_per_example=0.0, horizon=math.inf):
        self.l1, self.l1_per_example, self.horizon = l1, l1_per_example, horizon
        self.learned = 0
        self.accumulated = 0.0

    def margin(self, row):
        return self.intercept() + sum(self.weight(i) * x for i, x in row.items())

    def pressure_of(self, weight):
        """What this example, the `learned`-th, adds to the strength in force."""
        return self.l1_per_example * weight if self.learned <= self.horizon else 0.0

    def predict_then_update(self, row, label, weight=1.0):
        margin = self.margin(row)
        if label is not None:
            self.learned += 1
            self.update(row, (sigmoid(margin) - label) * weight, self.pressure_of(weight))
        return margin


class Ftrl(Twin):
    """McMahan et al., "Ad click prediction: a view from the trenches", KDD 2013, Algorithm 1.

    Its lambda_1 grows by each example, as in McMahan, "Follow-the-regularized-leader and mirror descent",
    AISTATS 2011.
    """

    def __init__(self, alpha, beta=1.0, lambda_2=0.0, **penalty):
        super().__init__(**penalty)
        self.alpha, self.beta, self.lambda_2 = alpha, beta, lambda_2
        self.z, self.n = {}, {}
        self.constant_z = self.constant_n = 0.0

    def weight(self, i):
        z, n = self.z.get(i, 0.0), self.n.get(i, 0.0)
        lambda_1 = self.l1 + self.accumulated
        if abs(z) <= lambda_1:
            return 0.0
        sign = 1 if z > 0 else -1
        return -(z - sign * lambda_1) / ((self.beta + math.sqrt(n)) / self.alpha + self.lambda_2)

    def intercept(self):
        return -self.constant_z / ((self.beta + math.sqrt(self.constant_n)) / self.alpha)

    def update(self, row, gradient, pressure):
        constant = self.intercept()
        weights = {i: self.weight(i) for i in row}
        for i, x in row.items():
            g = gradient * x
            n = self.n.get(i, 0.0)
            sigma = (math.sqrt(n + g * g) - math.sqrt(n)) / self.alpha
            self.z[i] = self.z.get(i, 0.0) + g - sigma * weights[i]
            self.n[i] = n + g * g
        sigma = (math.sqrt(self.constant_n + gradient**2) - math.sqrt(self.constant_n)) / self.alpha
        self.constant_z += gradient - sigma * constant
        self.constant_n += gradient**2
        self.accumulated += pressure


class TruncatedGradient(Twin):
    """Langford, Li, Zhang, JMLR 10 (2009), K = 1, theta infinite: each example truncates every weight."""

    def __init__(self, eta, **penalty):
        super().__init__(**penalty)
        self.eta = eta
        self.w = {}
        self.constant = 0.0

    def weight(self, i):
        return self.w.get(i, 0.0)

    def intercept(self):
        return self.constant

    def update(self, row, gradient, pressure):
        for i, x in row.items():
            self.w[i] = self.weight(i) - self.eta * gradient * x
        for i, w in self.w.items():
            self.w[i] = max(0.0, w - self.eta * pressure) if w >= 0 else min(0.0, w + self.eta * pressure)
        self.constant -= self.eta * gradient
        self.accumulated += pressure


class Descent(Twin):
    """Descent without a penalty; the rate of a coordinate is made from its sum of squared gradients."""

    def __init__(self, rate):
        super().__init__()
        self.rate = rate
        self.w, self.n = {}, {}

    def weight(self, i):
        return self.w.get(i, 0.0)

    def intercept(self):
        return self.weight("intercept")

    def update(self, row, gradient, pressure):
        for i, x in {**row, "intercept": 1.0}.items():
            self.n[i] = self.n.get(i, 0.0) + (gradient * x) ** 2
            self.w[i] = self.weight(i) - self.rate(self.n[i]) * gradient * x
