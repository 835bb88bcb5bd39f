"""One run of one peer on one table; prints a line of JSON. The table is in memory, level fields are
one-hot, before the clock starts."""

import json
import sys
import time
import warnings

import numpy


def design(path):
    data = numpy.load(path)
    x, columns = data["x"], []
    for name in sorted((n for n in data.files if n.startswith("g")), key=lambda n: int(n[1:])):
        codes = data[name]
        columns.append((codes[:, None] == numpy.arange(1, codes.max() + 1)).astype(float))
    return numpy.hstack([x, *columns]), data["y"].astype(int)


def log_likelihood(x, y, coefficients, intercepts):
    odds = x @ coefficients.T + intercepts
    odds -= odds.max(axis=1, keepdims=True)
    return float((odds[numpy.arange(len(y)), y] - numpy.log(numpy.exp(odds).sum(axis=1))).sum())


def scikit_learn(x, y, solver):
    from sklearn.linear_model import LogisticRegression

    # No penalty; the tolerance is what it takes to reach nine digits of the log-likelihood.
    model = LogisticRegression(C=numpy.inf, solver=solver, tol=1e-7, max_iter=1000)
    started = time.perf_counter()
    model.fit(x, y)
    seconds = time.perf_counter() - started
    return seconds, log_likelihood(x, y, model.coef_, model.intercept_)


def statsmodels(x, y):
    from statsmodels.discrete.discrete_model import MNLogit

    design = numpy.hstack([numpy.ones((len(x), 1)), x])
    started = time.perf_counter()
    fitted = MNLogit(y, design).fit(method="newton", disp=0, tol=1e-10)
    fitted.bse
    return time.perf_counter() - started, float(fitted.llf)


if __name__ == "__main__":
    warnings.simplefilter("ignore")
    peer, path = sys.argv[1:]
    x, y = design(path)
    if peer == "statsmodels":
        seconds, reached = statsmodels(x, y)
    else:
        seconds, reached = scikit_learn(x, y, peer)
    print(json.dumps({"seconds": seconds, "log_likelihood": reached}))
