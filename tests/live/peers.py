"""Fits a table with statsmodels and scikit-learn: reads a description of the table as JSON on standard
input, writes what they find as JSON.

In: {"csv": path, "outcome": name, "categories": [reference first], "numbers": [names],
"levels": {name: [reference first]}, "count": name or null, "ridge": penalty per case or null}.
Out: for each category but the reference one number per term (intercept, numbers, levels), by name of
the quantity."""

import json
import sys
import warnings

import numpy
import pandas
from sklearn.linear_model import LogisticRegression
from statsmodels.discrete.discrete_model import MNLogit


def design(table, case):
    columns = [table[name].to_numpy(float) for name in case["numbers"]]
    for name, levels in case["levels"].items():
        columns += [(table[name] == level).to_numpy(float) for level in levels[1:]]
    return numpy.column_stack(columns)


def by_statsmodels(x, y):
    """Maximum likelihood by Newton's method to the last digits; model-based and HC0 errors."""
    model = MNLogit(y, numpy.column_stack([numpy.ones(len(y)), x]))
    options = {"method": "newton", "disp": 0, "tol": 1e-13, "maxiter": 100}
    fitted = model.fit(**options)
    robust = model.fit(cov_type="HC0", **options)
    return {
        "coefficients": numpy.asarray(fitted.params).T.tolist(),
        "standard_errors": numpy.asarray(fitted.bse).T.tolist(),
        "robust_errors": numpy.asarray(robust.bse).T.tolist(),
        "log_likelihood": float(fitted.llf),
        "log_likelihood_null": float(fitted.llnull),
        "probabilities": numpy.asarray(fitted.predict()).tolist(),
    }


def by_scikit_learn(x, y, weight, inverse_penalty):
    model = LogisticRegression(C=inverse_penalty, solver="newton-cg", tol=1e-12, max_iter=10_000)
    model.fit(x, y, sample_weight=weight)
    coefficients = numpy.column_stack([model.intercept_, model.coef_])
    if len(coefficients) == 1:  # two categories: one row, of the second
        coefficients = numpy.vstack([numpy.zeros_like(coefficients), coefficients])
    return (coefficients[1:] - coefficients[0]).tolist(), model.predict_proba(x).tolist()


def main():
    warnings.simplefilter("ignore")
    case = json.load(sys.stdin)
    table = pandas.read_csv(case["csv"], dtype={name: str for name in [case["outcome"], *case["levels"]]})
    x = design(table, case)
    y = table[case["outcome"]].map({name: place for place, name in enumerate(case["categories"])}).to_numpy()
    count = numpy.ones(len(y)) if case["count"] is None else table[case["count"]].to_numpy(float)
    found = {}
    if case["ridge"] is None:
        # statsmodels knows no counts: rows are repeated.
        times = count.astype(int)
        found["statsmodels"] = by_statsmodels(numpy.repeat(x, times, axis=0), numpy.repeat(y, times))
        coefficients, probabilities = by_scikit_learn(x, y, count, numpy.inf)
    else:
        # The penalty is on standardised columns, r W / 2 times the sum of squares over all categories.
        mean = numpy.average(x, axis=0, weights=count)
        deviation = numpy.sqrt(numpy.average((x - mean) ** 2, axis=0, weights=count))
        scaled = (x - mean) / deviation
        coefficients, probabilities = by_scikit_learn(scaled, y, count, 1 / (case["ridge"] * count.sum()))
    found["scikit_learn"] = {"coefficients": coefficients, "probabilities": probabilities}
    json.dump(found, sys.stdout)


if __name__ == "__main__":
    main()
