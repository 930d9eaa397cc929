"""A file with x, y and strengths in; rows of intercept and weights out, by skglm's proximal Newton solver."""

import sys

import numpy as np
from skglm import GeneralizedLinearEstimator
from skglm.datafits import Logistic
from skglm.penalties import L1
from skglm.solvers import ProxNewton


def main(problem, answer):
    given = np.load(problem)
    x, y, rows = np.asfortranarray(given["x"]), given["y"].astype(int), []
    for strength in given["strengths"]:
        solver = ProxNewton(tol=1e-6, max_iter=200, fit_intercept=True)
        fit = GeneralizedLinearEstimator(Logistic(), L1(float(strength)), solver).fit(x, y)
        rows.append(np.concatenate([np.ravel(fit.intercept_), np.ravel(fit.coef_)]))
    np.save(answer, np.array(rows))


if __name__ == "__main__":
    main(*sys.argv[1:])
