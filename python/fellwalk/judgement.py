"""What `judge` hands back: the numbers for each parameter, the verdict, and their text."""

import math
from dataclasses import dataclass, field
from typing import Any, ClassVar

import numpy as np
from numpy.typing import NDArray

from fellwalk import table
from fellwalk.errors import ArgumentError
from fellwalk.identities import IdentityCheck
from fellwalk.verdict import Verdict

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Judgement:
    """Numbers and verdict on draws. Arrays have shape (dimension,), in the order of `names`; print it for the table.

    estimate, error: posterior mean and its Monte Carlo standard error.
    spread, spread_error: posterior standard deviation and its Monte Carlo standard error.
    low, middle, high and low_error, middle_error, high_error: 5%, 50% and 95% quantiles and their errors.
    worth, worth_tails: effective sample size in the centre, and the smaller one of the 5% and 95% tails.
        Draws that counterbalance each other are worth more than their number, here at most twice.
    worth_mean: effective sample size for the mean of the draws as they are, on which `error` rests.
    agreement: rank-normalised split R-hat, the larger one of centre and spread; NaN for a constant.
    constant, event: which parameters never vary; which are truth values, with a probability as their estimate.
    in_doubt, spread_in_doubt: whether `error` and `spread_error`, though made wider, are hardly known since tails are
        so heavy that what is averaged may have no fourth moment (`fellwalk.tails`).
    energy_fraction: (chains,) energy fraction of missing information, or None without facts.
    failures: how many transitions met a failed step, by status code; failed_share: their share, NaN without facts.
    spent: what the run cost; gradients_per_worth, products_per_worth, seconds_per_worth: the same for one effective
        draw of the parameter with the least worth, NaN when not known.
    verdict: `fellwalk.verdict.Verdict` with kind, reasons, draws_needed, notes and caution.

    Judged together with gradients, numbers are sharpened where that helps: by["estimate"][i] (also "spread", "low",
    "middle", "high") says with which terms, "none" where the draws speak alone, and worth is then how many independent
    draws would give the error of the sharpened estimate. raw: the judgement of the draws alone, under the same verdict;
    itself where nothing was sharpened. identities: what draws and gradients say of each other, None without gradients.
    """

    NUMBERS: ClassVar[tuple[str, ...]] = (
        "estimate", "error", "spread", "spread_error", "low", "low_error", "middle", "middle_error", "high",
        "high_error", "worth", "worth_tails", "worth_mean", "agreement", "constant", "event", "in_doubt",
        "spread_in_doubt",
    )  # fmt: skip

    names: tuple[str, ...]
    chains: int
    draws_per_chain: int
    estimate: Array
    error: Array
    spread: Array
    spread_error: Array
    low: Array
    low_error: Array
    middle: Array
    middle_error: Array
    high: Array
    high_error: Array
    worth: Array
    worth_tails: Array
    worth_mean: Array
    agreement: Array
    constant: NDArray[np.bool_]
    event: NDArray[np.bool_]
    in_doubt: NDArray[np.bool_]
    spread_in_doubt: NDArray[np.bool_]
    energy_fraction: Array | None
    failures: dict[int, int]
    judged_facts: bool
    spent: dict[str, float]
    verdict: Verdict
    draws: Array = field(repr=False)
    by: dict[str, tuple[str, ...]] = field(default_factory=dict)
    identities: IdentityCheck | None = None
    plain: "Judgement | None" = field(default=None, repr=False)

    @property
    def raw(self) -> "Judgement":
        """The judgement of the draws alone."""
        return self.plain or self

    @property
    def failed_share(self) -> float:
        """Share of the transitions whose path met a failed step, from 0 to 1."""
        return sum(self.failures.values()) / (self.chains * self.draws_per_chain) if self.judged_facts else math.nan

    @property
    def gradients_per_worth(self) -> float:
        return self._per_worth("gradients")

    @property
    def products_per_worth(self) -> float:
        return self._per_worth("products")

    @property
    def seconds_per_worth(self) -> float:
        return self._per_worth("seconds")

    def _per_worth(self, what: str) -> float:
        least = self.least_worth()
        return (
            float(self.spent[what]) / float(self.worth[least]) if what in self.spent and least is not None else math.nan
        )

    def least_worth(self) -> int | None:
        """Index of the parameter with the least worth in its centre; None when all are constant."""
        return None if self.constant.all() else int(np.nanargmin(self.worth))

    def quantile(self, level: float) -> tuple[Array, Array]:
        """A quantile of every parameter by the draws alone and its Monte Carlo standard error, both (dimension,).

        level: between 0 and 1, ends excluded. Raises ArgumentError otherwise. Vehtari et al. (2021).
        """
        if isinstance(level, bool) or not isinstance(level, int | float | np.number) or not 0 < level < 1:
            raise ArgumentError(f"The level of a quantile must be a number between 0 and 1, not {level!r}.")
        from fellwalk.judge import quantiles

        return quantiles(self.draws, float(level), self.raw.worth)

    def table(self, *, all: bool = False) -> str:
        """The table alone, at most 80 columns wide: the parameters in most need of attention, or all of them."""
        return table.parameters(self, all_rows=all)

    def __str__(self) -> str:
        return "\n".join([self.table(), "", *table.verdict_lines(self)])

    def to_dict(self) -> dict[str, Any]:
        """All but the draws as plain Python objects that any JSON writer takes; what is not finite becomes None."""
        parameters = [
            {"name": name} | {key: _plain(getattr(self, key)[i]) for key in self.NUMBERS}
            | ({"by": {key: words[i] for key, words in self.by.items()}} if self.by else {})
            for i, name in enumerate(self.names)
        ]
        verdict = self.verdict
        sharpened = {"raw": self.raw.to_dict()["parameters"]} if self.plain is not None else {}
        checked = self.identities
        if checked is not None:
            sharpened["identities"] = {
                "checked": checked.checked, "broken": len(checked.alarms), "why_not": checked.why_not,
            }  # fmt: skip
        return {
            "chains": self.chains,
            "draws_per_chain": self.draws_per_chain,
            "parameters": parameters,
            "energy_fraction": None if self.energy_fraction is None else [_plain(f) for f in self.energy_fraction],
            "failures": {str(code): count for code, count in self.failures.items()},
            "failed_share": _plain(self.failed_share),
            "spent": {key: _plain(value) for key, value in self.spent.items()},
            "gradients_per_worth": _plain(self.gradients_per_worth),
            "products_per_worth": _plain(self.products_per_worth),
            "seconds_per_worth": _plain(self.seconds_per_worth),
            "verdict": {
                "kind": verdict.kind,
                "reasons": list(verdict.reasons),
                "draws_needed": verdict.draws_needed,
                "notes": list(verdict.notes),
                "caution": verdict.caution,
            },
            **sharpened,
        }


def _plain(value: Any) -> bool | int | float | None:
    value = value.item() if isinstance(value, np.generic) else value
    return value if isinstance(value, bool | int) or math.isfinite(value) else None
