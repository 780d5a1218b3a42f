"""What the prices say, as a document and in plain sentences."""

from __future__ import annotations

from collections.abc import Iterator
from typing import TYPE_CHECKING, Any

from analysis.anarchy import NO_EQUILIBRIUM, Cost, TurningWeight
from analysis.confidence import Estimate
from analysis.goals import Welfare
from analysis.price_bands import BootstrapPrices, EpsilonPrice
from analysis.prices import PriceStudy

if TYPE_CHECKING:
    from analysis.games import Sets

APPROXIMATE = (
    "approximate: replications are resampled and the equilibria selected anew each time; it covers less often than it "
    "says"
)
OVER_ALL = "whichever of the possible profiles are the equilibria"
NO_PROOF = (
    "These prices suppose that the game has a pure equilibrium; that is not shown here, for a confirmed profile may "
    "leave a gain of up to epsilon"
)


def projected_sentences(
    cost: Cost, welfare: Welfare, sets: Sets | None
) -> Iterator[tuple[str, Estimate | None, str]]:
    """(sentence, number, unit) on the prices whose intervals hold over every possible equilibrium."""
    if cost.worst is None:
        yield f"No price of anarchy: {NO_EQUILIBRIUM}", None, "ratio"
        return
    price, kindest, lost = cost.price_of_anarchy, cost.price_of_stability, cost.lost_per_year
    if price.low is None or price.high is None:
        yield f"No interval of the price of anarchy: {price.reason}", None, "ratio"
    else:
        said = f"The price of anarchy lies between {price.low:.4f} and {price.high:.4f}, {OVER_ALL}"
        yield said + _estimated(price, 4), price, "ratio"
        yield f"The price of stability lies between the same two{_estimated(kindest, 4)}", kindest, "ratio"
    if lost.low is not None and lost.high is not None:
        unit = _unit(welfare)
        yield (
            f"{_loses(welfare, lost.low, lost.high)} {unit}{_estimated(lost, 1)}",
            lost,
            unit,
        )
    else:
        yield f"No interval of what the worst equilibrium loses: {lost.reason}", None, _unit(welfare)
    if sets is None or exists(sets):
        return
    if (sets.confirmed.mask & sets.possible.mask).any():
        yield NO_PROOF, None, "profiles"
    else:
        yield (
            (
                "None of the possible profiles is confirmed, so the game may have no pure equilibrium, and then these "
                "prices do not exist"
            ),
            None,
            "profiles",
        )


def exists(sets: Sets) -> bool:
    """Whether a pure equilibrium is sure to exist, at the confidence of the sets.

    Who chooses alone has a best choice; else some profile must leave nobody any gain, by the regrets' upper ends.
    """
    alone = sum(choices > 1 for choices in sets.possible.mask.shape) < 2
    return alone or bool((sets.bounds.high == 0).all(axis=0).any())


def _loses(welfare: Welfare, low: float, high: float) -> str:
    ends = f"between {low:.1f} and {high:.1f}"
    if welfare.sense == "gain":
        return f"The worst equilibrium forgoes {ends}"
    return f"The worst equilibrium costs the network {ends} more"


def _unit(welfare: Welfare) -> str:
    if welfare.kind == "throughput":
        return "patients a year"
    return f"a year of ({welfare.reads.replace(' a day', '')})"


def _estimated(estimate: Estimate, digits: int) -> str:
    if estimate.mean is None:
        return ""
    return f" (estimated table: {round(estimate.mean, digits) + 0.0:.{digits}f})"  # + 0.0: no minus before nought


def turning_interval(turning: TurningWeight) -> str:
    """The interval of the turning weight in words; nothing where there is none."""
    if turning.low is None:
        return ""
    if turning.high is None:
        return f" (from {turning.low:.3f} on, {OVER_ALL}; no upper end is set)"
    return f" ({turning.low:.3f} to {turning.high:.3f}, {OVER_ALL})"


def study_document(study: PriceStudy, *, exact: bool) -> dict[str, Any]:
    """The document's keys of a study."""
    found: dict[str, Any] = {
        "price_over_transfer_weights": [
            {
                "weight": row.weight,
                "price_of_anarchy": _number(row.price_of_anarchy, exact),
                "lost_per_year": _number(row.lost_per_year, exact),
            }
            for row in study.over_weights
        ]
    }
    if study.within_epsilon is not None:
        found["prices_within_epsilon"] = _within(study.within_epsilon)
    if not exact:
        found["prices_by_bootstrap"] = _bootstrap(study.bootstrap, study.bootstrap_reason)
    return found


def _number(estimate: Estimate, exact: bool) -> Any:
    return estimate.mean if exact else estimate.to_dict()


def _within(one: EpsilonPrice) -> dict[str, Any]:
    return {
        "epsilon": one.epsilon,
        "confirmed": one.confirmed,
        "price_of_anarchy_at_least": one.anarchy_at_least,
        "price_of_stability_at_most": one.stability_at_most,
    } | ({} if one.reason is None else {"reason": one.reason})


def _bootstrap(one: BootstrapPrices | None, reason: str | None) -> dict[str, Any]:
    if one is None:
        return {"price_of_anarchy": None, "reason": reason}
    return {
        "label": APPROXIMATE,
        "price_of_anarchy": one.price_of_anarchy.to_dict(),
        "price_of_stability": one.price_of_stability.to_dict(),
        "tables": one.tables,
        "share_without_equilibrium": one.without,
    }


def study_sentences(study: PriceStudy) -> Iterator[str]:
    """What a study adds, in words."""
    within = study.within_epsilon
    if within is not None and within.anarchy_at_least is not None:
        yield (
            f"Among equilibria within a regret of {within.epsilon:.2g} the price of anarchy is at least "
            f"{within.anarchy_at_least:.4f} and the price of stability at most {within.stability_at_most:.4f} "
            f"({within.confirmed} confirmed)."
        )
    boot = study.bootstrap
    if boot is not None and boot.price_of_anarchy.low is not None:
        price = boot.price_of_anarchy
        yield (
            f"Bootstrap of the price of anarchy: {price.low:.4f} to {price.high:.4f} (approximate: narrower, and "
            "covers less often than it says)."
        )
