"""Small sheets that several tests share; the bakery and all numbers are invented."""

import random

BAKERY = """
title   = "Bakery, week 14"
measure = "EUR"

[aim]
maximize = "4.20*loaf + 2.75*roll_tray - 18*overtime"

[activities]
loaf      = { most = 900 }
roll_tray = { least = 20, most = 240, unit = "trays" }
overtime  = { whole = false, most = 12, unit = "h" }

[rules]
oven   = "0.02*loaf + 0.05*roll_tray <= 16 + overtime"
mixer  = "6 <= 0.01*loaf + 0.02*roll_tray <= 9"
shelf  = { rule = "loaf >= 3*roll_tray", note = "contract with the school" }
"""

CRATES = """
title = "Crates"
measure = "EUR"
[aim]
maximize = "55*a + 67*b + 41*c + 33*d + 48*e"
[activities]
a = { most = 4 }
b = { most = 3 }
c = { most = 5 }
d = { most = 5 }
e = { most = 4 }
[rules]
room   = "13*a + 17*b + 11*c + 9*d + 12*e <= 97"
weight = "7*a + 6*b + 9*c + 5*d + 8*e <= 61"
labour = "5*a + 8*b + 3*c + 4*d + 7*e <= 43"
"""

SOFT = """
measure = "h"
[aim]
minimize = "3*a + 2*b"
[activities]
a = { most = 10 }
b = { most = 10, whole = false }
[rules]
need  = { rule = "a + b >= 7.25", give = 0.7, give_most = 4 }
third = "3*b <= 10"
"""

INFEASIBLE = """
[activities]
a = { most = 10 }
[rules]
odd = "2*a = 5"
"""

UNBOUNDED = """
[aim]
maximize = "a - b"
[activities]
a = {}
b = {}
[rules]
near = "a - 2*b <= 5"
"""

NO_AIM = """
[activities]
a = { most = 10 }
b = { most = 10 }
[rules]
sum = "2*a + 3*b = 17"
"""

# Two divisible activities whose best amounts are 13/7 and 11/7: no short decimals.
SEVENTHS = """
[aim]
maximize = "a + b"
[activities]
a = { whole = false }
b = { whole = false }
[rules]
one = "3*a + b <= 50/7"
two = "a + 5*b <= 68/7"
"""

ALL = {
    "bakery": BAKERY,
    "crates": CRATES,
    "soft": SOFT,
    "infeasible": INFEASIBLE,
    "unbounded": UNBOUNDED,
    "no aim": NO_AIM,
    "sevenths": SEVENTHS,
}


def split_evenly(seed: int = 3, pieces: int = 40, kinds: int = 6) -> str:
    """Return a sheet that shares pieces out evenly in several measures at once.

    Its relaxation is worth nothing, so that the search must branch for very long (the form of
    the market split problem: G. Cornuejols, M. Dawande, A class of hard small 0-1 programs,
    INFORMS J. Computing 11:205-210, 1999).
    """
    draw = random.Random(seed)
    lines = ['title = "Even shares"', 'measure = "EUR"', "[aim]"]
    lines.append('minimize = "' + " + ".join(f"over{k} + under{k}" for k in range(kinds)) + '"')
    lines.append("[activities]")
    lines += [f"x{j} = {{ most = 1 }}" for j in range(pieces)]
    lines += [f"over{k} = {{}}\nunder{k} = {{}}" for k in range(kinds)]
    lines.append("[rules]")
    for k in range(kinds):
        sizes = [draw.randint(0, 99) for _ in range(pieces)]
        total = " + ".join(f"{size}*x{j}" for j, size in enumerate(sizes))
        lines.append(f'kind{k} = "{total} + under{k} - over{k} = {sum(sizes) // 2}"')
    return "\n".join(lines) + "\n"
