"""Makes the invented data of the demo: `python -m fellwalk.demo.make_hives > hives.csv`.

No bee was weighed. Every number comes from the seeded random numbers below, so that a reader can see what the
model ought to find. Python's own generator is used because its `random()` is promised to stay the same for a seed.
"""

from random import Random
from statistics import NormalDist

# Picked from seven seeds tried: with this one the data leave it possible that the apiaries hardly differ.
SEED = 58
# The values behind the data, in kg a week.
MEAN_GAIN = 2.1
SPREAD = 0.5
NOISE = 1.0
APIARIES = (
    "Alder", "Bramble", "Clover", "Dogwood", "Elder", "Fern", "Gorse",
    "Hazel", "Ivy", "Juniper", "Knapweed", "Linden", "Mallow", "Nettle",
)  # fmt: skip
HEADER = """\
# invented data: no hive was weighed, see make_hives.py
# gain of weight over one week of one hive, in kg, to the nearest 10 g
apiary,weighing,gain_kg
"""


def invent() -> str:
    """The whole data file as text: 2 to 6 weighings for each of 14 apiaries, the same text at every call."""
    random = Random(SEED)
    standard = NormalDist()

    def normal() -> float:
        return standard.inv_cdf(random.random())

    lines = []
    for apiary in APIARIES:
        level = MEAN_GAIN + SPREAD * normal()
        weighings = 2 + int(5 * random.random())
        lines += [f"{apiary},{k},{level + NOISE * normal():.2f}\n" for k in range(1, weighings + 1)]
    return HEADER + "".join(lines)


if __name__ == "__main__":
    print(invent(), end="")
