"""Motions and paths as plain data: what moves a point, and how far."""

import operator
from dataclasses import dataclass
from numbers import Complex, Real

from fellwalk._core import MAX_DOUBLINGS, MAX_HALVINGS
from fellwalk.errors import ArgumentError

__all__ = ["Isokinetic", "Jittered", "Lagrangian", "Leapfrog", "NoUTurn"]


def whole(name: str, value: object, least: int, most: int) -> int:
    """`value` as an int inside [least, most], or a sentence."""
    if isinstance(value, bool) or not hasattr(value, "__index__"):
        raise ArgumentError(f"{name} must be a whole number; it is {value!r:.60}")
    number = operator.index(value)
    if not least <= number <= most:
        raise ArgumentError(f"{name} must be from {least} to {most}; it is {number}")
    return number


def real(name: str, value: object, above: float, most: float, *, include: bool = False) -> float:
    """`value` as a float in (above, most], or [above, most] with include; or a sentence."""
    try:
        if isinstance(value, str | bytes) or (isinstance(value, Complex) and not isinstance(value, Real)):
            raise TypeError
        number = float(value)  # type: ignore[arg-type]
    except (TypeError, ValueError, OverflowError):
        raise ArgumentError(f"{name} must be a number; it is {value!r:.60}") from None
    if not (above < number <= most or (include and number == above)):
        bound = "at least" if include else "above"
        raise ArgumentError(f"{name} must be {bound} {above:g} and at most {most:g}; it is {number!r}")
    return number


def set_plain(record: object, **values: object) -> None:
    """Set fields of a frozen dataclass to the plain numbers that the checks made of them."""
    for name, value in values.items():
        object.__setattr__(record, name, value)


def chosen(name: str, value: object, choices: tuple[str, ...]) -> str:
    """`value` when it is one of the choices, or a sentence."""
    if value not in choices:
        raise ArgumentError(f"{name} must be one of {', '.join(map(repr, choices))}; it is {value!r:.60}")
    return str(value)


@dataclass(frozen=True)
class _OverBase:
    """A motion over the base metric alone."""

    halvings: int = 0

    name = ""

    def __post_init__(self) -> None:
        set_plain(self, halvings=whole("halvings", self.halvings, 0, MAX_HALVINGS))

    def core(self) -> dict[str, object]:
        """The members of the core's settings that this motion fixes."""
        return {"motion": self.name, "scheme": "split", "curvature": "surrogate", "bend": 0.0,
                "halvings": self.halvings}


@dataclass(frozen=True)
class Leapfrog(_OverBase):
    """Leapfrog steps over the learned base metric (Duane et al. 1987; Neal 2011).

    halvings: a step may be done as up to 2**halvings smaller ones where the energy swings (0: never).
    """

    name = "leapfrog"


@dataclass(frozen=True)
class Lagrangian:
    """Lagrangian motion on the Monge metric G = G0 + beta g g' (Lan et al. 2015; G0: the learned base metric).

    bend: how strongly the metric bends, as the typical g'G0^-1 g beta = L - 1 in the bulk of the target; settling
        turns it into beta, and lowers it when it caps the acceptance rate. 0 is the leapfrog motion. The default is
        small because with a learned base metric larger ones lost more than they gained on our benchmark targets.
    curvature: "surrogate" replaces the Hessian by -G0 (one gradient a step, exact target, never an exact flow),
        "difference" takes Hessian products from gradient differences, "product" from the density's own function.
    scheme: "split" solves the Christoffel part exactly (2 products a step); "semi-explicit" is the published
        integrator of Lan et al. (3 products a step).
    halvings: as for Leapfrog.
    """

    bend: float = 0.1
    curvature: str = "surrogate"
    scheme: str = "split"
    halvings: int = 0

    name = "lagrangian"

    def __post_init__(self) -> None:
        set_plain(self, bend=real("bend", self.bend, 0.0, 1e6, include=True))
        chosen("curvature", self.curvature, ("surrogate", "difference", "product"))
        chosen("scheme", self.scheme, ("split", "semi-explicit"))
        set_plain(self, halvings=whole("halvings", self.halvings, 0, MAX_HALVINGS))

    def core(self) -> dict[str, object]:
        """The members of the core's settings that this motion fixes."""
        return {"motion": self.name, "scheme": self.scheme, "curvature": self.curvature, "bend": float(self.bend),
                "halvings": self.halvings}


@dataclass(frozen=True)
class Isokinetic(_OverBase):
    """A velocity of constant length that gradients only turn, over the learned base metric (Ver Steeg & Galstyan 2021;
    Robnik, Cohn-Gordon & Seljak 2025, arXiv 2503.01707), drawn anew for every path and with an accept test.

    One gradient a step; needs at least two coordinates. In many dimensions give it ``path=Jittered("auto")``, whose
    length settling finds. halvings: as for Leapfrog.
    """

    name = "isokinetic"


@dataclass(frozen=True)
class Jittered:
    """A number of steps drawn uniformly from 1..steps, then one accept test (Mackenze 1989; Neal 2011).

    steps: a number, or "auto": settling finds it by doubling, from effective draws per gradient of pilots (a chain
    that does not settle then takes 16).
    """

    steps: int | str = 16

    name = "jittered"

    def __post_init__(self) -> None:
        if isinstance(self.steps, str) and self.steps != "auto":
            raise ArgumentError(f'steps must be a whole number or "auto"; it is {self.steps!r:.60}')
        if self.steps != "auto":
            set_plain(self, steps=whole("steps", self.steps, 1, 2**31 - 1))

    def core(self) -> dict[str, object]:
        """The members of the core's settings that this path fixes."""
        return {"path": self.name, "steps": 0 if self.steps == "auto" else self.steps, "doublings": 10, "turn": "base"}


@dataclass(frozen=True)
class NoUTurn:
    """Doubling until the orbit turns back (Hoffman & Gelman 2014; Betancourt 2017), at most 2**doublings steps.

    turn: "base" tests with the momentum of the base metric G0 v, "metric" with that of the full metric G v.
    """

    doublings: int = 10
    turn: str = "base"

    name = "no-u-turn"

    def __post_init__(self) -> None:
        set_plain(self, doublings=whole("doublings", self.doublings, 1, MAX_DOUBLINGS - 1))
        chosen("turn", self.turn, ("base", "metric"))

    def core(self) -> dict[str, object]:
        """The members of the core's settings that this path fixes."""
        return {"path": self.name, "steps": 1, "doublings": self.doublings, "turn": self.turn}


Motion = Leapfrog | Lagrangian | Isokinetic
Path = Jittered | NoUTurn
MOTIONS = {kind.name: kind for kind in (Leapfrog, Lagrangian, Isokinetic)}
PATHS = {kind.name: kind for kind in (Jittered, NoUTurn)}


def check_fits(motion: Motion, dimension: int, has_product: bool) -> None:
    """Errors: ArgumentError where the density lacks what the motion needs."""
    if motion.core()["curvature"] == "product" and not has_product:
        raise ArgumentError('curvature="product" needs a density with a Hessian product; give hessian_product= to '
                            'Density, or choose curvature="surrogate" or "difference"')
    if isinstance(motion, Isokinetic) and dimension < 2:
        raise ArgumentError("the isokinetic motion needs at least 2 coordinates, as its velocity can only turn; this "
                            "density has 1: use fellwalk.Leapfrog()")
