"""Published arithmetic and published experience of hospital beds.

Two kinds of statements, kept apart. The arithmetic behind the "85 %" rule is exact and is tested as such, by
simulation with stays as intensive-care registries report them; at most 50 facts, a false alarm 1 in 40,000
for that part (see `facts.py`), planted errors a bed and 5 % of a stay. The statements of plausibility
reproduce no number of the papers they name (their bed numbers and rates were not at hand): they say that the
simulator's units behave as those papers describe, and that the invented demonstrations lie within what is
observed.
"""

from __future__ import annotations

from pathlib import Path

import pytest

from analysis.simulation import summarise
from sim.scenario import read_scenario
from sim.stays import Lognormal
from tests.outside.facts import network, patients_of, records_of, refuted
from tests.outside.teletraffic import erlang_b, offered_at_refusal, offered_at_utilisation

# Computed from Erlang's loss formula (1917): the share refused where utilisation is 85 %, and the utilisation
# where 5 % are refused, by staffed beds. The message is that of de Bruin, Bekker, van Zanten & Koole,
# "Dimensioning hospital wards using the Erlang loss model", Annals of Operations Research 178 (2010), 23-43
# (abstract read).
REFUSED_AT_85 = {
    6: 0.464, 10: 0.327, 12: 0.282, 15: 0.231, 20: 0.173, 24: 0.141, 30: 0.108, 40: 0.074, 60: 0.040,
}  # fmt: skip
UTILISATION_AT_5 = {
    6: 0.469, 10: 0.590, 12: 0.629, 15: 0.673, 20: 0.724, 24: 0.753, 30: 0.785, 40: 0.822, 60: 0.864,
}  # fmt: skip

# Length of stay of 111,663 patients in 131 intensive care units, 2008-09: mean 3.4, standard deviation 5.1,
# median 1.8 days (BMC Medical Research Methodology 12:68, 2012, abstract read).
MEAN_STAY, CV, MEDIAN = 3.4, 1.5, 1.8
STAY = {"family": "lognormal", "mean_days": MEAN_STAY, "cv": CV}
SCENARIOS = [
    file
    for file in sorted((Path(__file__).parents[2] / "scenarios").glob("*.toml"))
    if "[[units]]" in file.read_text(encoding="utf-8")  # not a plan
]


def loss_unit(beds, offered, *, mean_days=MEAN_STAY, patients=2_000):
    """A unit with this offered load, long enough for so many patients in each replication."""
    per_day = offered / MEAN_STAY
    stay = STAY | {"mean_days": mean_days}
    return network(
        [{"name": "A", "beds": beds}], [patients_of("A", per_day, stay)], days=(98, patients / per_day)
    )


class TestArithmeticOfThe85PercentRule:
    @pytest.mark.parametrize(("beds", "refused"), REFUSED_AT_85.items())
    def test_formula(self, beds, refused):
        assert round(erlang_b(beds, offered_at_utilisation(beds, 0.85)), 3) == refused

    @pytest.mark.parametrize(("beds", "utilisation"), UTILISATION_AT_5.items())
    def test_formula_at_five_per_cent_refused(self, beds, utilisation):
        assert round(offered_at_refusal(beds, 0.05) * 0.95 / beds, 3) == utilisation

    def facts(self, beds):
        refused = erlang_b(beds, offered_at_utilisation(beds, 0.85))
        return {
            ("A", "utilisation"): 0.85,
            ("A", "turned_away_share"): refused,
            ("A", "full_fraction"): refused,
        }

    @pytest.mark.parametrize("beds", [6, 12, 24, 60])
    def test_simulated(self, beds):
        assert not refuted(self.facts(beds), loss_unit(beds, offered_at_utilisation(beds, 0.85)))

    @pytest.mark.parametrize("beds", [6, 20, 40])
    def test_simulated_at_five_per_cent_refused(self, beds):
        offered = offered_at_refusal(beds, 0.05)
        facts = {("A", "turned_away_share"): 0.05, ("A", "utilisation"): 0.95 * offered / beds}
        assert not refuted(facts, loss_unit(beds, offered))

    @pytest.mark.parametrize("beds", [6, 24])
    def test_a_bed_too_many_is_refuted(self, beds):
        assert refuted(self.facts(beds), loss_unit(beds + 1, offered_at_utilisation(beds, 0.85)))

    def test_a_stay_too_long_is_refuted(self):
        scenario = loss_unit(24, offered_at_utilisation(24, 0.85), mean_days=1.05 * MEAN_STAY)
        assert refuted(self.facts(24), scenario)


class TestPlausibility:
    """Statements of plausibility: no number of the papers is reproduced here."""

    def share_refused(self, beds, utilisation):
        scenario = loss_unit(beds, offered_at_utilisation(beds, utilisation), patients=3_000)
        records = records_of(scenario, replications=12)
        return summarise(records, scenario, confidence=0.95).units["A"]["turned_away_share"].mean

    def test_turning_away_rises_steeply_above_80_to_85_per_cent(self):
        """McManus, Long, Cooper & Litvak, Anesthesiology 100 (2004), 1271-1276 (abstract read).

        The step from 80 to 90 % utilisation costs at least twice the refusals of the step from 70 to 80 %.
        """
        at_70, at_80, at_90 = (self.share_refused(18, utilisation) for utilisation in (0.7, 0.8, 0.9))
        assert at_90 - at_80 > 2 * (at_80 - at_70) > 0.05

    def test_one_target_for_all_sizes_is_unfair_to_small_units(self):
        """de Bruin et al. 2010, above: at the same 85 % a small unit refuses several times as many."""
        assert self.share_refused(6, 0.85) > 5 * self.share_refused(48, 0.85)

    def test_a_lognormal_stay_of_the_registry_has_nearly_its_median(self):
        """The family is a fair picture of stays: two of its moments nearly give the third figure."""
        assert Lognormal(mean=MEAN_STAY, cv=CV).median() == pytest.approx(MEDIAN, rel=0.06)


def seen_in(scenario):
    """Utilisation of the network, and transfers per admission, in three replications."""
    simulation = summarise(records_of(scenario, replications=3), scenario, confidence=0.95)
    occupied = sum(unit["mean_occupied"].mean for unit in simulation.units.values())
    beds, whole = sum(unit.beds for unit in scenario.units), simulation.network
    return occupied / beds, whole["transfers_per_day"].mean / whole["throughput_per_day"].mean


def is_plausible(utilisation, transfers):
    """Whether a network could be one of those observed.

    Mean hourly occupancy of 97 intensive care units: 68.2 %, standard deviation 21.3 (Wunsch et al., Critical
    Care Medicine 2013); 70 to 75 % is thought best (Tierney & Conroy, Australian Critical Care 2014); above
    85 % lies risk (Bagust, Place & Posnett, BMJ 319, 1999, 155-158, abstract read). Transfers per admission:
    0.25 % in 198 units (Barratt et al., Critical Care 16:R179, 2012; author from memory) to 6.6 % at a
    tertiary centre (Journal of Intensive Care 2020, s40560-020-00501-z).
    """
    return 0.60 <= utilisation <= 0.85 and 0.0025 <= transfers <= 0.066


class TestPlausibilityOfTheDemonstrations:
    """Statements of plausibility on the invented networks that come with the program."""

    def test_there_are_some(self):
        assert len(SCENARIOS) >= 3

    @pytest.mark.parametrize("path", SCENARIOS, ids=lambda path: path.stem)
    def test_within_what_is_observed(self, path):
        assert is_plausible(*seen_in(read_scenario(path)))

    @pytest.mark.parametrize("demand", [0.5, 1.7])
    @pytest.mark.parametrize("path", SCENARIOS, ids=lambda path: path.stem)
    def test_another_demand_is_not(self, path, demand):
        assert not is_plausible(*seen_in(read_scenario(path).with_demand(demand)))
