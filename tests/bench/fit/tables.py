"""Writes the tables of the benchmark, each as raw columns, as a numpy archive and as Parquet."""

import sys

import numpy
import pandas

# name: rows, numbers, categories, levels of each level field
CASES = {
    "dense-20": (1_000_000, 20, 4, []),
    "categories-10": (200_000, 64, 10, []),
    "dense-200": (200_000, 200, 3, []),
    "levels": (200_000, 8, 4, [20] * 10),
}


def table(name, seed=20260301):
    rows, numbers, categories, levels = CASES[name]
    random = numpy.random.default_rng(seed)
    x = random.standard_normal((rows, numbers))
    # Fields are correlated, as they are in life.
    x[:, 1:] += 0.4 * x[:, :-1]
    codes = [random.integers(0, count, rows, dtype=numpy.uint32) for count in levels]
    odds = numpy.zeros((rows, categories))
    odds[:, 1:] = random.normal(-0.3, 0.3, categories - 1)
    odds[:, 1:] += x @ random.normal(0, 0.8 / numpy.sqrt(numbers), (numbers, categories - 1))
    for column, count in zip(codes, levels):
        odds[:, 1:] += random.normal(0, 0.2, (count, categories - 1))[column]
    gumbel = random.gumbel(size=odds.shape)
    return x, codes, (odds + gumbel).argmax(axis=1).astype(numpy.uint32)


def write(folder, name):
    x, codes, y = table(name)
    rows, numbers, categories, levels = CASES[name]
    with open(f"{folder}/{name}.raw", "wb") as file:
        file.write((" ".join(map(str, [rows, numbers, categories, *levels])) + "\n").encode())
        for column in x.T:
            file.write(numpy.ascontiguousarray(column).tobytes())
        for column in [*codes, y]:
            file.write(column.tobytes())
    numpy.savez(f"{folder}/{name}.npz", x=x, y=y, **{f"g{i}": c for i, c in enumerate(codes)})
    columns = {f"x{i}": x[:, i] for i in range(numbers)}
    columns |= {f"g{i}": c.astype(str) for i, c in enumerate(codes)}
    columns["y"] = y.astype(str)
    pandas.DataFrame(columns).to_parquet(f"{folder}/{name}.parquet", compression="snappy")
    with open(f"{folder}/{name}.toml", "w") as file:
        file.write(f'name = "bench"\n[data]\nfiles = ["{name}.parquet"]\n')
        file.write('[outcome]\nfield = "y"\nreference = "0"\n')
        for i in range(numbers):
            file.write(f'[[field]]\nname = "x{i}"\nkind = "number"\n')
        for i in range(len(levels)):
            file.write(f'[[field]]\nname = "g{i}"\nkind = "levels"\nreference = "0"\n')


if __name__ == "__main__":
    for case in sys.argv[2:] or CASES:
        write(sys.argv[1], case)
