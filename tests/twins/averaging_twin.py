"""Averages over the stream, written plainly: all examples are kept, and count what they count when asked."""

from tests.twins.learners_twin import sigmoid


class Averages:
    """Beside a twin of a learner; `predict_then_update` takes the place of its own.

    The loss of an example is taken as a parabola in each weight: slope g x, curvature h x^2, about the weight
    of then. The average is where the parabolas and the penalty on what counts are least.
    """

    def __init__(self, twin, every, lambda_2=0.0):
        self.twin, self.every, self.lambda_2 = twin, every, lambda_2
        self.seen = []  # of each example: share kept, row, weights before, g, h
        self.inside = self.learned = self.pull = self.curve = 0.0

    def predict_then_update(self, row, label, weight=1.0):
        weights, constant = {i: self.twin.weight(i) for i in row}, self.twin.intercept()
        margin = self.twin.predict_then_update(row, label, weight)
        if label is not None:
            p = sigmoid(margin)
            g, h = weight * (p - label), weight * ((p - label) ** 2 + p * (1 - p)) / 2
            if self.seen and len(self.seen) % self.every == 0:
                self.fade(0.5)
            self.seen.append((1.0, row, weights, g, h))
            self.learned += weight
            self.inside += weight
            self.pull += self.inside * (h * constant - g)
            self.curve += self.inside * h
        return margin

    def fade(self, kept):
        """What was added so far counts `kept` as much."""
        self.seen = [(share * kept, *rest) for share, *rest in self.seen]
        self.inside, self.pull, self.curve = self.inside * kept, self.pull * kept**2, self.curve * kept**2

    def weight(self, i):
        """Each average meets the penalty that the learner's weights meet, for each unit of example weight."""
        held = [one for one in self.seen if i in one[1]]
        first = sum(share * (h * row[i] ** 2 * w[i] - g * row[i]) for share, row, w, g, h in held)
        second = sum(share * h * row[i] ** 2 for share, row, _, _, h in held)
        part = self.inside / self.learned if self.learned else 1.0
        beyond = abs(first) - (self.twin.l1 + self.twin.accumulated) * part
        if beyond <= 0:
            return 0.0
        return (1 if first > 0 else -1) * beyond / (second + self.lambda_2 * part)

    def intercept(self):
        """Without a penalty; an example counts as often as there was example weight by then."""
        return self.pull / self.curve if self.curve else self.twin.intercept()
