"""Values of the functions that the core works out itself: Bessel functions, complementary error function, tail of the
normal distribution and its inverse. Compares with tests/published/physics/functions.csv; --write replaces it.
"""
import sys

from scipy.special import erfc, j0, j1, ndtri
from scipy.stats import norm

from tables import agree, finish, table, write

HEADER = ["x", "j0", "j1", "erfc", "normal_tail", "tail_quantile"]
PLACES = [0.1, 0.25, 0.5, 1.0, 1.5, 2.0, 2.5, 3.0, 4.0, 5.0, 7.0, 7.9, 8.1, 10.0, 15.0, 25.0, 60.0, 125.0]


def functions(x):
    """All of them at one place; the quantile is that of the tail probability 1 / (10 x + 2)."""
    return [j0(x), j1(x), erfc(x), norm.sf(x), -ndtri(1 / (10 * x + 2))]


if "--write" in sys.argv:
    write("physics/functions.csv", HEADER, [[x] + [f"{value:.12g}" for value in functions(x)] for x in PLACES])

worst = dict.fromkeys(HEADER[1:], 0.0)
for row in table("physics/functions.csv"):
    for name, value in zip(HEADER[1:], functions(float(row["x"]))):
        difference = agree(f"{name} at {row['x']}", value, row[name], 1e-11 * abs(value) + 1e-300)
        worst[name] = max(worst[name], difference)
finish("functions", worst)
