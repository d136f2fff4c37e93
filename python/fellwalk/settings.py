"""The settings of a chain: checked once, written to records as JSON, handed to the core as they are."""

from dataclasses import asdict, dataclass, field
from typing import Any

from fellwalk._core import MAX_DIRECTIONS
from fellwalk.errors import ArgumentError
from fellwalk.motions import MOTIONS, PATHS, Leapfrog, Motion, NoUTurn, Path, real, set_plain, whole

__all__ = ["Settings"]

# Open plans of settling stop between these numbers of transitions. Measured on the benchmark targets: fewer than 150
# leave the step size of one window unaveraged; none of the targets gained from more than 1500.
AUTO_SETTLE = (150, 1500)


@dataclass(frozen=True)
class Settings:
    """How a chain moves and settles.

    settle: transitions, or "auto". rank: directions of the base metric, or "auto": those that stand out, at most 16.
    """

    motion: Motion = field(default_factory=Leapfrog)
    path: Path = field(default_factory=NoUTurn)
    settle: int | str = "auto"
    acceptance: float = 0.8
    step_size: float | None = None
    adapt_scale: bool = True
    beta: float | None = None
    rank: int | str = "auto"

    def __post_init__(self) -> None:
        if not isinstance(self.motion, tuple(MOTIONS.values())):
            raise ArgumentError(f"motion must be one of {_listed(MOTIONS)}; it is {self.motion!r:.60}")
        if not isinstance(self.path, tuple(PATHS.values())):
            raise ArgumentError(f"path must be one of {_listed(PATHS)}; it is {self.path!r:.60}")
        _, most = self.settle_bounds()
        set_plain(self, settle=self.settle if self.settle == "auto" else most, adapt_scale=bool(self.adapt_scale),
                  acceptance=real("acceptance", self.acceptance, 0.0, 0.9999))
        if self.step_size is not None:
            set_plain(self, step_size=real("step_size", self.step_size, 0.0, 1e300))
        if self.rank != "auto":
            if isinstance(self.rank, str):
                raise ArgumentError(f'rank must be a number of directions or "auto"; it is {self.rank!r}')
            set_plain(self, rank=whole("rank", self.rank, 0, MAX_DIRECTIONS))
        if self.beta is not None:
            set_plain(self, beta=real("beta", self.beta, 0.0, 1e300, include=True))

    def settle_bounds(self) -> tuple[int, int]:
        """Least and most settling transitions."""
        if self.settle == "auto":
            return AUTO_SETTLE
        if isinstance(self.settle, str):
            raise ArgumentError(f'settle must be a number of transitions or "auto"; it is {self.settle!r}')
        number = whole("settle", self.settle, 0, 2**40)
        return number, number

    def core(self) -> dict[str, object]:
        """The members of the core's settings struct by name."""
        least, most = self.settle_bounds()
        return {
            **self.motion.core(),
            **self.path.core(),
            "beta": -1.0 if self.beta is None else float(self.beta),
            "halving_bound": 2.0,
            "step_size": float(self.step_size or 0.0),
            "acceptance": float(self.acceptance),
            "settle_least": least,
            "settle_most": most,
            "rank": MAX_DIRECTIONS if self.rank == "auto" else int(self.rank),
            "rank_fixed": int(self.rank != "auto"),
            "adapt_step": 1,
            "adapt_scale": int(self.adapt_scale),
        }

    def to_json(self) -> dict[str, object]:
        """Plain JSON values; `from_json` makes the same settings of them."""
        found = asdict(self)
        found["motion"] = {"name": self.motion.name, **asdict(self.motion)}
        found["path"] = {"name": self.path.name, **asdict(self.path)}
        return found

    @classmethod
    def from_json(cls, values: dict[str, Any]) -> "Settings":
        """Settings from what `to_json` gave."""
        motion, path = dict(values["motion"]), dict(values["path"])
        return cls(**{
            **values,
            "motion": MOTIONS[motion.pop("name")](**motion),
            "path": PATHS[path.pop("name")](**path),
        })


def _listed(kinds: dict[str, type[Motion]] | dict[str, type[Path]]) -> str:
    return ", ".join(f"fellwalk.{kind.__name__}(...)" for kind in kinds.values())


