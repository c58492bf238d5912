"""Reading, writing and comparing the tables in tests/published/."""
import csv
import pathlib
import sys

PUBLISHED = pathlib.Path(__file__).resolve().parent.parent / "published"
_failures = []


def table(name):
    """A table with a header line: one dictionary of strings a row."""
    with open(PUBLISHED / name, newline="") as file:
        return list(csv.DictReader(file))


def numbers(name, kind=int):
    """A table without a header: one list of numbers a row, rows may differ in length."""
    with open(PUBLISHED / name) as file:
        return [[kind(cell) for cell in line.split(",")] for line in file.read().split()]


def write(name, header, rows):
    """Writes a table, with a header line if `header` is not empty."""
    with open(PUBLISHED / name, "w") as file:
        for row in ([header] if header else []) + rows:
            file.write(",".join(str(cell) for cell in row) + "\n")
    print(f"wrote {name}")


def agree(what, computed, stored, tolerance):
    """Notes whether a stored value is what was computed, within an absolute tolerance."""
    difference = abs(computed - float(stored))
    good = difference <= tolerance
    if not good:
        _failures.append(what)
        print(f"DISAGREES {what}: computed {computed!r}, stored {stored}, tolerance {tolerance}")
    return difference


def finish(name, worst):
    """Prints the largest differences and ends with status 1 if anything disagreed."""
    listed = ", ".join(f"{key} {value:.2e}" for key, value in worst.items())
    print(f"{name}: largest differences: {listed}")
    sys.exit(1 if _failures else 0)
