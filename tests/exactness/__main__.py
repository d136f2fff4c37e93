"""Prints the table of all combinations and what each planted error reaches: `python -m exactness` in tests/."""

from .combinations import combinations, limit, result, table
from .planted import PLANTED

print(table(combinations()))
print(f"\nlimit of one p value: {limit():.2g}\n")
for planted in PLANTED:
    for c in planted.seen:
        print(f"{planted.what} | {c} | {result(c).least:.2g} -> {result(c, planted.mutation).least:.2g}")
