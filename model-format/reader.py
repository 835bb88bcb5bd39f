#!/usr/bin/env python3
"""Reads a kilter model file and scores records, with nothing but the standard library.

    python3 reader.py MODEL.json < records.ndjson     one JSON object in, one JSON object out per line
    python3 reader.py --vectors vectors/*.json        compares with the test vectors

A scored record gives {"probabilities": [...]}, in the order of the model's categories; a refused one
{"refused": {"field": ..., "reason": ...}}. Written after FORMAT.md alone, as a second opinion on it and as an
example to start from. It checks format, version, fingerprint, terms and the number of coefficients; it
does not verify signatures.
"""

import decimal
import hashlib
import json
import math
import sys


class Unusable(Exception):
    """The file is no model file that this reader can use."""


class Refused(Exception):
    """A record that cannot be scored: the field and the reason."""


# JSON as the format means it: unique keys, finite numbers.


def parse(text):
    def unique(pairs):
        entries = dict(pairs)
        if len(entries) < len(pairs):
            raise ValueError("a key stands twice")
        return entries

    return json.loads(text, object_pairs_hook=unique, **NUMBERS)


def parse_record(text):
    """A record as a list of pairs, because a key given twice spoils one field only."""
    record = json.loads(text, object_pairs_hook=Pairs, **NUMBERS)
    if not isinstance(record, Pairs):
        raise ValueError("not an object")
    return record


class Pairs(list):
    """A JSON object of a record."""


def finite(text):
    number = float(text)
    if not math.isfinite(number):
        raise ValueError(f"{text} is not a finite number")
    return number


def integer(text):
    """Integers of 64 bits are integers, all others are floating-point numbers; so is minus zero."""
    if text != "-0" and len(text) <= 20 and -(2**63) <= int(text) < 2**64:
        return int(text)
    return finite(text)


NUMBERS = {"parse_float": finite, "parse_int": integer, "parse_constant": finite}


# The fingerprint: canonical JSON (RFC 8785), SHA-256.


def canonical(value):
    if isinstance(value, dict):
        keys = sorted(value, key=lambda key: key.encode("utf-16-be"))
        return "{" + ",".join(canonical(key) + ":" + canonical(value[key]) for key in keys) + "}"
    if isinstance(value, list):
        return "[" + ",".join(map(canonical, value)) + "]"
    if isinstance(value, (int, float)) and not isinstance(value, bool):
        return canonical_number(float(value))
    return json.dumps(value, ensure_ascii=False)


def canonical_number(number):
    """A number as ECMAScript writes it; Python's repr has the same digits."""
    if number == 0:
        return "0"
    sign, digits, exponent = decimal.Decimal(repr(number)).normalize().as_tuple()
    digits = "".join(map(str, digits))
    point = len(digits) + exponent  # Position of the decimal point after the first digit's left edge.
    if len(digits) <= point <= 21:
        text = digits + "0" * (point - len(digits))
    elif 0 < point <= 21:
        text = digits[:point] + "." + digits[point:]
    elif -6 < point <= 0:
        text = "0." + "0" * -point + digits
    else:
        fraction = "." + digits[1:] if len(digits) > 1 else ""
        text = f"{digits[0]}{fraction}e{point - 1:+d}"
    return "-" + text if sign else text


def fingerprint(document):
    covered = {key: value for key, value in document.items() if key not in ("fingerprint", "signature")}
    return "sha256:" + hashlib.sha256(canonical(covered).encode("utf-8")).hexdigest()


# Columns of the fields.


def columns_of(field):
    """Columns of a field: pairs of a name and what computes it. The value of a column is a number."""
    name = field["name"]
    if field["kind"] == "flag":
        return [(name, lambda value: 1.0 if value else 0.0)]
    if field["kind"] == "levels":
        compared = [level for level in field["levels"] if level != field["reference"]]
        return [(f"{name}={level}", lambda value, level=level: 1.0 if value == level else 0.0) for level in compared]
    form = field.get("form", "as-is")
    if form == "as-is":
        return [(name, lambda x: x)]
    if form == "log":
        return [(f"log({name})", math.log)]
    if form == "log1p":
        return [(f"log1p({name})", math.log1p)]
    if "polynomial" in form:
        powers = range(1, form["polynomial"] + 1)
        return [(name if k == 1 else f"{name}^{k}", lambda x, k=k: math.prod([x] * k)) for k in powers]
    knots = form["spline"]["knots"]
    splines = range(len(knots) - 2)
    curved = [(f"spline{r + 1}({name})", lambda x, r=r: spline(knots, r, x)) for r in splines]
    return [(name, lambda x: x)] + curved


def spline(knots, r, x):
    last = knots[-1]
    if x > last:
        slope = 3.0 * truncated(knots, r, last, 2)
        return truncated(knots, r, last, 3) + slope * (x - last)
    return truncated(knots, r, x, 3)


def truncated(knots, r, x, power):
    first, before, last = knots[0], knots[-2], knots[-1]

    def above(knot):
        return math.prod([max(x - knot, 0.0)] * power)

    gap = last - before
    total = above(knots[r]) - above(before) * (last - knots[r]) / gap + above(last) * (before - knots[r]) / gap
    return total / ((last - first) * (last - first))


# From the cell of a record to the value that is used.


def right_kind(field, cell):
    if cell is None:
        return True
    if field["kind"] == "number":
        return isinstance(cell, (int, float)) and not isinstance(cell, bool)
    if field["kind"] == "levels":
        return isinstance(cell, (str, int)) and not isinstance(cell, bool)
    return isinstance(cell, bool) or (isinstance(cell, int) and cell in (0, 1))


def used_number(field, cell):
    """The number to use, or None where the columns take their means."""
    missing = field.get("missing", "refuse")
    if cell is None:
        if missing == "refuse":
            raise Refused(field["name"], "is missing")
        return float(missing["value"]) if "value" in missing else None
    x = float(cell)
    low, high = field.get("range") or (-math.inf, math.inf)
    form = field.get("form", "as-is")
    if not low <= x <= high:
        raise Refused(field["name"], f"{x} is outside the valid range {low} to {high}")
    if (form == "log" and x <= 0.0) or (form == "log1p" and x <= -1.0):
        raise Refused(field["name"], f"{x} has no logarithm")
    return x


def used_level(field, cell):
    if cell is None or cell == "":
        policy = field.get("missing", "refuse")
        problem = "is missing"
    else:
        level = str(cell)
        level = field.get("merged", {}).get(level, level)
        if level in field["levels"]:
            return level
        policy = field.get("unseen", "refuse")
        problem = f"level '{level}' was not in the fit"
    if policy == "refuse":
        raise Refused(field["name"], problem)
    return field["reference"] if policy == "reference" else policy


def used_flag(field, cell):
    missing = field.get("missing", "refuse")
    if cell is None:
        if missing == "refuse":
            raise Refused(field["name"], "is missing")
        return missing["value"]
    return bool(cell)


USED = {"number": used_number, "levels": used_level, "flag": used_flag}


class Model:
    """A model file, checked and ready to score."""

    def __init__(self, document):
        if not isinstance(document, dict) or document.get("format") != "kilter-model":
            raise Unusable("`format` is not `kilter-model`")
        version = document.get("format_version")
        if not isinstance(version, str) or version.split(".")[0] != "1":
            raise Unusable(f"format version {version} is not supported; this reader reads 1.x")
        if document.get("fingerprint") != fingerprint(document):
            raise Unusable("the fingerprint is not that of the content")
        self.fields = document["fields"]
        self.interactions = document.get("interactions", [])
        self.categories = document["outcome"]["categories"]
        self.reference = document["outcome"]["reference"]
        self.columns = {field["name"]: columns_of(field) for field in self.fields}
        self.coefficients = document["coefficients"]
        names = self.term_names()
        if names != document["terms"]:
            raise Unusable("`terms` are not those that fields and interactions make")
        compared = [category for category in self.categories if category != self.reference]
        if any(len(self.coefficients[category]) != len(names) for category in compared):
            raise Unusable("not one coefficient per term")

    def term_names(self):
        names = ["(intercept)"]
        for field in self.fields:
            names += [name for name, _ in self.columns[field["name"]]]
            if means_of(field) is not None:
                names.append(f"missing({field['name']})")
        for first, second in self.interactions:
            names += [f"{a}:{b}" for a, _ in self.columns[first] for b, _ in self.columns[second]]
        return names

    def terms(self, record):
        """Values of all terms; None where a level that the term needs does not hold."""
        values, flags = {}, {}
        for field in self.fields:
            name = field["name"]
            value = USED[field["kind"]](field, cell_of(record, name))
            means = means_of(field)
            if value is None:
                values[name] = [float(mean) for mean in means]
            else:
                values[name] = [compute(value) for _, compute in self.columns[name]]
            if field["kind"] == "levels":
                values[name] = [held or None for held in values[name]]
            flags[name] = [] if means is None else [1.0 if value is None else 0.0]
        terms = [1.0]
        for field in self.fields:
            terms += values[field["name"]] + flags[field["name"]]
        for first, second in self.interactions:
            for a in values[first]:
                terms += [None if a is None or b is None else a * b for b in values[second]]
        return terms

    def probabilities(self, record):
        self.find_spoilt_cells(record)
        terms = self.terms(record)
        log_odds = []
        for category in self.categories:
            row = [0.0] * len(terms) if category == self.reference else self.coefficients[category]
            total = 0.0
            for term, coefficient in zip(terms, row):
                if term is not None and category != self.reference:
                    total += term * coefficient
            log_odds.append(total)
        if not all(map(math.isfinite, log_odds)):
            raise Refused("", "the log-odds of this record are too large to compute")
        largest = max(log_odds)
        shares = [math.exp(odds - largest) for odds in log_odds]
        total = sum(shares)
        return [share / total for share in shares]

    def find_spoilt_cells(self, record):
        """Cells of the wrong kind and keys given twice come first, in the order of the record."""
        by_name = {field["name"]: field for field in self.fields}
        seen = set()
        for key, cell in record:
            if key not in by_name:
                continue
            if key in seen:
                raise Refused(key, "is given twice")
            seen.add(key)
            if not right_kind(by_name[key], cell):
                raise Refused(key, f"is no {by_name[key]['kind']}")

    def score(self, line):
        try:
            record = parse_record(line.decode("utf-8"))
        except (ValueError, RecursionError) as error:
            return {"refused": {"field": "", "reason": f"not a JSON object: {error}"}}
        try:
            return {"probabilities": self.probabilities(record)}
        except Refused as refused:
            field, reason = refused.args
            return {"refused": {"field": field, "reason": reason}}


def means_of(field):
    missing = field.get("missing", "refuse")
    if field["kind"] == "number" and isinstance(missing, dict) and "mean-and-flag" in missing:
        return missing["mean-and-flag"]["means"]
    return None


def cell_of(record, name):
    return next((cell for key, cell in record if key == name), None)


def read_model(text):
    try:
        return Model(parse(text))
    except (ValueError, KeyError, TypeError, RecursionError) as error:
        raise Unusable(f"not a model file: {error!r}") from error


# The two uses.


def agrees(found, case, tolerance=1e-12):
    if "refused" in case:
        return found.get("refused", {}).get("field") == case["refused"]["field"]
    found, wanted = found.get("probabilities", []), case["probabilities"]
    # Below 1e-300 floating-point numbers have fewer digits.
    near = [abs(a - b) <= tolerance * b + 1e-300 for a, b in zip(found, wanted)]
    return len(found) == len(wanted) and all(near)


def compare(paths):
    wrong = 0
    for path in paths:
        with open(path, encoding="utf-8") as file:
            text = file.read()
        vectors = parse(text)
        model = Model(vectors["model"])
        for position, case in enumerate(vectors["cases"]):
            found = model.score(json.dumps(case["record"]).encode())
            if not agrees(found, case):
                wrong += 1
                print(f"{path}: case {position}: {found} instead of {case}")
        print(f"{path}: {len(vectors['cases'])} cases")
    return 1 if wrong else 0


def main(arguments):
    if len(arguments) >= 2 and arguments[0] == "--vectors":
        return compare(arguments[1:])
    if len(arguments) != 1:
        print(__doc__, file=sys.stderr)
        return 64
    try:
        with open(arguments[0], encoding="utf-8") as file:
            model = read_model(file.read())
    except (OSError, UnicodeDecodeError, Unusable) as error:
        print(f"{arguments[0]}: {error}", file=sys.stderr)
        return 2
    for line in sys.stdin.buffer:
        print(json.dumps(model.score(line)))
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
