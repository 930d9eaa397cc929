"""How far weights are from the batch optimum: sums over a log in, a lower bound of the objective out."""
