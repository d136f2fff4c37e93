"""The demo: the main job from a density to judged draws, told step by step."""

import sys
from pathlib import Path

import numpy as np

from fellwalk.demo import hives
from fellwalk.density import Density
from fellwalk.errors import RecordError
from fellwalk.motions import Leapfrog
from fellwalk.record import Record
from fellwalk.run import run

__all__ = ["density", "show"]

MODEL = "fellwalk.demo.show:density"


def density() -> Density:
    """The invented hives as a density of 17 coordinates."""
    made = Density(hives.value_gradient, hives.dimension, names=list(hives.coordinates), start=hives.start)
    made.model = MODEL
    return made


def show(folder: str = ".") -> int:
    """Run the demo, with its record in `folder`; the exit status."""
    target = _free_name(Path(folder))
    model = density()
    value, gradient = model(hives.start)
    print("Invented data: weekly weight gains of hives in 14 apiaries, a few weighings each.\n"
          "The model: every apiary has a level of its own, normal around a common one; the\n"
          "spread between apiaries is unknown, and where it is small the levels are held\n"
          "tightly, so the posterior narrows like a funnel.\n\n"
          f"The density: {model.dimension} coordinates; at the start its logarithm is {value:.2f} and the\n"
          f"largest gradient {np.abs(gradient).max():.2f}.\n")
    sys.stdout.flush()
    result = run(model, motion=Leapfrog(halvings=8), acceptance=0.9, keep=14_000, chains=4, seed=26, record=target,
                 replace=True, progress=True)
    print(f"{result.heading()}\n\n{result.of(hives.natural, names=list(hives.names))}\n\n"
          f"Saved: {target} (draws, facts of every transition, states, settings).\n"
          f"Next:  python -m fellwalk report {target}\n"
          f"       python -m fellwalk resume {target} --keep 20000\n"
          f"       in Python: fellwalk.load({str(target)!r}).draws")
    return 0


def _free_name(folder: Path) -> Path:
    """demo.fell, or the first of demo-2.fell, ... that is not somebody else's."""
    for number in range(1, 1000):
        path = folder / ("demo.fell" if number == 1 else f"demo-{number}.fell")
        if not path.exists():
            return path
        try:
            with Record.open(path) as record:
                if record.settings.get("model") == MODEL:
                    return path
        except RecordError:
            continue
    raise RecordError(f"{folder} holds too many demo records; remove some")
