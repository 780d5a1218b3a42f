"""What a sound scenario file gives: every form that TOML allows, the defaults, and changes of the whole.

The forms are those of the TOML specification, v1.0.0 (Preston-Werner, Gedam et al., 2021). Networks are
invented.
"""

import hashlib
import pickle

import pytest

from sim import stays
from sim.scenario import Scenario, parse_scenario, read_scenario

LEAST = """
schema = 1
[[units]]
name = "Ashgill"
beds = 12
[[units]]
name = "Norbeck"
beds = 18
[[patients]]
group = "Ashgill emergencies"
home = "Ashgill"
per_day = 2.1
stay = { family = "exponential", mean_days = 4 }
"""
ASHGILL_STAY = '{ family = "exponential", mean_days = 4 }'

FULL = """
schema = 1
title = "Two units in the fells (invented)"

[run]
seed = 9223372036854775807
warm_up_days = 0
measured_days = 364.5
replications = 1
confidence = 0.99

[[units]]
name = "Ashgill"
beds = 12
closure_threshold = 11
incoming_threshold = 0
reopening_gap = 20
admit_while_closed = 1
review_hours = 8
target_utilisation = 0.75
referral_order = []
stay_factor = 1.25

[[units]]
name = "Norbeck"
beds = 18
closure_threshold = 0

[[patients]]
group = "Norbeck emergencies"
home = "Norbeck"
kind = "emergency"
per_day = 3.3
hour_of_day = [1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 2, 2, 2, 2, 2, 2, 2, 2, 2, 2, 2, 2]
day_of_week = [1.0, 1, 1, 1, 1, 0.5, 0]
stay = { family = "weibull", mean_days = 3.9, cv = 1.4 }

[[patients]]
group = "Ashgill emergencies"
home = "Ashgill"
per_day = 1
stay = { family = "constant", mean_days = 0 }

[diversion]
when_all_closed = "any_bed"
delay = { family = "lognormal", mean_hours = 2.5, cv = 0.5 }
extra_days = 0.5

[game]
goal = { kind = "target_utilisation", shape = "squared", judged_over_days = 91 }
welfare = { kind = "loss", transfer_weight = 0.3 }
strategies = { Ashgill = { from = 0, to = 12 }, Norbeck = { values = [18, 6] } }

[[policies]]
name = "close only when full"
closure_threshold = { Ashgill = 12, Norbeck = 18 }
"""


def stay_of(text: str, **options) -> stays.Distribution:
    return parse_scenario(LEAST.replace(ASHGILL_STAY, text), **options).patients[0].stay.distribution()


def test_everything_but_the_required_keys_has_a_default():
    scenario = parse_scenario(LEAST)
    run, game, diversion = scenario.run, scenario.game, scenario.diversion
    assert (run.seed, run.warm_up_days, run.measured_days) == (4021, 126, 728)
    assert (run.replications, run.confidence) == (32, 0.95)
    assert (scenario.title, scenario.policies) == ("", ())
    assert scenario.patients[0].kind == "emergency"
    assert scenario.patients[0].pattern.is_constant
    assert (diversion.when_all_closed, diversion.delay, diversion.extra_days) == ("home_bed", None, 0.0)
    assert (game.goal.kind, game.goal.shape) == ("target_utilisation", "absolute")
    assert game.goal.judged_over_days == 365
    assert game.welfare.kind == "throughput"
    assert scenario.strategies() == {"Ashgill": tuple(range(1, 13)), "Norbeck": tuple(range(1, 19))}
    unit = scenario.unit("Norbeck")
    assert (unit.reopening_gap, unit.admit_while_closed, unit.review_hours) == (1, 0.0, 0.0)
    assert (unit.stay_factor, unit.target_utilisation) == (1.0, None)


def test_every_key_is_read_as_it_is_written():
    scenario = parse_scenario(FULL)
    assert scenario.unit_names == ("Ashgill", "Norbeck")
    assert scenario.run.seed == 2**63 - 1
    assert scenario.run.measured_days == 364.5
    unit = scenario.unit("Ashgill")
    assert (unit.beds, unit.closure_threshold, unit.incoming_threshold, unit.reopening_gap) == (12, 11, 0, 20)
    assert (unit.admit_while_closed, unit.review_hours, unit.stay_factor) == (1.0, 8.0, 1.25)
    assert (unit.referral_order, unit.target_utilisation) == ((), 0.75)
    assert [group.group for group in scenario.patients] == ["Norbeck emergencies", "Ashgill emergencies"]
    assert scenario.patients[0].day_of_week == (1, 1, 1, 1, 1, 0.5, 0)
    assert scenario.patients[1].stay.distribution() == stays.Constant(0.0)
    assert scenario.diversion.delay.distribution() == stays.Lognormal(mean=2.5, cv=0.5)
    assert scenario.game.goal.judged_over_days == 91
    assert scenario.game.welfare.transfer_weight == 0.3
    assert scenario.strategies() == {"Ashgill": tuple(range(13)), "Norbeck": (18, 6)}


SAME_STAYS = {
    "sub-table": 'stay.family = "exponential"\nstay.mean_days = 4',
    "quoted key": '"stay" = { "family" = \'exponential\', "mean\\u005Fdays" = 4.0 }',
    "other numbers": 'stay = { family = "exponential", mean_days = 4.0e0 }',
    "hexadecimal": 'stay = { family = "exponential", mean_days = 0x0_4 }',
}


@pytest.mark.parametrize("stay", SAME_STAYS.values(), ids=SAME_STAYS)
def test_other_ways_of_writing_the_same(stay):
    other = parse_scenario(LEAST.replace(f"stay = {ASHGILL_STAY}", stay))
    assert other.model_dump() == parse_scenario(LEAST).model_dump()


def test_a_header_below_a_row_belongs_to_that_row():
    stay = '[patients.stay]\nfamily = "mixture"\n'
    stay += '[[patients.stay.parts]]\nfamily = "constant"\nmean_days = 1\nweight = 3\n'
    stay += '[[patients.stay.parts]] # the second\nfamily = "exponential"\nmean_days = 5\nweight = 1\n'
    scenario = parse_scenario(LEAST.replace(f"stay = {ASHGILL_STAY}", stay))
    parts = ((3.0, stays.Constant(1.0)), (1.0, stays.Exponential(5.0)))
    assert scenario.patients[0].stay.distribution() == stays.Mixture(parts)


def test_line_endings_and_a_byte_order_mark_change_nothing(tmp_path):
    file = tmp_path / "s.toml"
    for content in (FULL, FULL.replace("\n", "\r\n"), "\ufeff" + FULL):
        file.write_bytes(content.encode("utf-8"))
        assert read_scenario(file).model_dump() == parse_scenario(FULL).model_dump()


NAMES = [
    "North = South", 'the "old" wing', "it's", "<script>alert(1)</script>", "العناية المركزة", "x" * 200,
    "a.b", "[key]", "family", "from", "😀", "Sévère", "\u202eflip", "-1", "$(reboot)", "%s", "{rule}",
]  # fmt: skip


@pytest.mark.parametrize("name", NAMES)
def test_names_are_anyones_own(name):
    """Every name that can be printed is legal, also as a key."""
    quoted = '"' + name.replace("\\", "\\\\").replace('"', '\\"') + '"'
    text = LEAST.replace('"Ashgill"', quoted)
    text += f"[game]\nstrategies = {{ {quoted} = {{ from = 2, to = 3 }} }}\n"
    text += f'[[policies]]\nname = "p"\nclosure_threshold = {{ {quoted} = 0 }}\n'
    scenario = parse_scenario(text)
    assert scenario.unit_names[0] == name
    assert scenario.strategies()[name] == (2, 3)
    assert scenario.policy("p").thresholds[name] == 0


def test_names_are_composed_however_they_are_typed():
    """One letter of two characters is the letter of one character (Unicode Standard Annex 15, form NFC)."""
    at_home = LEAST.replace('home = "Ashgill"', 'home = "S\u00e9v\u00e8re"')
    for typed in ("Se\u0301ve\u0300re", "Se\\u0301ve\\u0300re"):
        scenario = parse_scenario(at_home.replace('name = "Ashgill"', f'name = "{typed}"'))
        assert scenario.unit_names[0] == scenario.patients[0].home == "S\u00e9v\u00e8re"


FAMILIES = {
    '{ family = "constant", mean_days = 2 }': stays.Constant(2.0),
    '{ family = "exponential", mean_days = 2 }': stays.Exponential(2.0),
    '{ family = "erlang", mean_days = 2, stages = 3 }': stays.Erlang(2.0, 3),
    '{ family = "gamma", mean_days = 2, cv = 0.5 }': stays.Gamma(2.0, 0.5),
    '{ family = "weibull", cv = 0.5, mean_days = 2 }': stays.Weibull(2.0, 0.5),
    '{ family = "lognormal", mean_days = 2, cv = 1.5 }': stays.Lognormal(2.0, 1.5),
    '{ family = "hyperexponential", mean_days = 2, cv = 1 }': stays.Hyperexponential(2.0, 1.0),
    '{ family = "coxian", goes_on = [0.4], rates_per_day = [1, 0.5] }': stays.Coxian((1.0, 0.5), (0.4,)),
}


@pytest.mark.parametrize("text", FAMILIES)
def test_stay_families(text):
    assert stay_of(text) == FAMILIES[text]


@pytest.mark.parametrize("text", FAMILIES)
def test_delays_take_the_same_families_in_hours(text):
    in_hours = text.replace("mean_days", "mean_hours").replace("rates_per_day", "rates_per_hour")
    scenario = parse_scenario(LEAST + f"[diversion]\ndelay = {in_hours}\n")
    assert scenario.diversion.delay.distribution() == FAMILIES[text]


CSV = 'id,days,note\n1,2.5,x\n2, 4 ,"two\nlines"\n3,0,\n\n'


def test_recorded_stays_are_read_from_beside_the_scenario(tmp_path):
    (tmp_path / "in").mkdir()
    (tmp_path / "in" / "stays.csv").write_bytes(b"\xef\xbb\xbf" + CSV.replace("\n", "\r\n").encode())
    (tmp_path / "s.toml").write_text(
        LEAST.replace(ASHGILL_STAY, '{ family = "empirical", file = "in/stays.csv", column = "days" }')
    )
    scenario = read_scenario(tmp_path / "s.toml")
    assert scenario.patients[0].stay.distribution() == stays.Empirical((2.5, 4.0, 0.0))
    content = (tmp_path / "in" / "stays.csv").read_bytes()
    assert scenario.source.data == {"in/stays.csv": hashlib.sha256(content).hexdigest()}
    assert scenario.source.file == str(tmp_path / "s.toml")


def everything(folder) -> Scenario:
    """A scenario with every kind of table, a mixture and recorded stays among them."""
    (folder / "stays.csv").write_text(CSV)
    recorded = '{ family = "empirical", file = "stays.csv", column = "days", weight = 1 }'
    always = '{ family = "constant", mean_days = 6, weight = 3 }'
    mixed = f'{{ family = "mixture", parts = [{recorded}, {always}] }}'
    text = FULL.replace('{ family = "weibull", mean_days = 3.9, cv = 1.4 }', mixed)
    return parse_scenario(text, folder=folder)


def test_a_scenario_travels_to_other_processes(tmp_path):
    scenario = everything(tmp_path)
    for sent in (scenario, scenario.with_demand(2.0), scenario.exponential()):
        received = pickle.loads(pickle.dumps(sent))
        assert received == sent
        assert received.source == sent.source
        assert [group.stay.distribution() for group in received.patients] == [
            group.stay.distribution() for group in sent.patients
        ]
        assert received.policy("close only when full") == sent.policy("close only when full")
    mixture = pickle.loads(pickle.dumps(scenario)).patients[0].stay.distribution()
    assert mixture.parts[0][1].values == (2.5, 4.0, 0.0)


def test_a_scenario_is_frozen():
    scenario = parse_scenario(LEAST)
    with pytest.raises(ValueError, match="frozen"):
        scenario.units[0].beds = 3


def test_more_demand_multiplies_every_rate_and_leaves_the_rest(tmp_path):
    scenario = everything(tmp_path)
    more = scenario.with_demand(1.5)
    assert [group.per_day for group in more.patients] == pytest.approx([4.95, 1.5])
    assert [group.stay for group in more.patients] == [group.stay for group in scenario.patients]
    assert more.with_demand(1 / 1.5).patients[1] == scenario.patients[1]
    assert scenario.patients[0].per_day == 3.3


def test_one_target_for_every_unit():
    aimed = parse_scenario(FULL).with_target(0.9)
    assert [unit.target_utilisation for unit in aimed.units] == [0.9, 0.9]
    assert [unit.beds for unit in aimed.units] == [12, 18]


def test_the_exponential_counterpart_keeps_means_and_rules(tmp_path):
    scenario = everything(tmp_path)
    plain = scenario.exponential()
    assert (plain.diversion.delay, plain.diversion.extra_days) == (None, 0.0)
    assert plain.diversion.when_all_closed == "any_bed"
    # By hand: (2.5 + 4 + 0) / 3 with weight 1 and 6 with weight 3; and a stay that is always 0.
    assert plain.patients[0].stay.distribution().mean() == pytest.approx((6.5 / 3 + 3 * 6) / 4)
    assert [group.stay.family for group in plain.patients] == ["exponential", "constant"]
    assert plain.patients[1].stay.distribution().mean() == 0.0
    assert all(group.hour_of_day is group.day_of_week is None for group in plain.patients)
    assert [group.per_day for group in plain.patients] == [3.3, 1.0]
    assert (plain.units, plain.game, plain.run) == (scenario.units, scenario.game, scenario.run)
    assert plain.policy() == scenario.policy()
    assert plain.source == scenario.source


@pytest.mark.parametrize("text", FAMILIES)
def test_the_exponential_counterpart_of_every_family_has_its_mean(text):
    plain = parse_scenario(LEAST.replace(ASHGILL_STAY, text)).exponential()
    assert plain.patients[0].stay.distribution() == stays.Exponential(FAMILIES[text].mean())


def test_other_run_values():
    changed = parse_scenario(FULL).with_run(seed=7, replications=3)
    assert (changed.run.seed, changed.run.replications, changed.run.confidence) == (7, 3, 0.99)


def test_there_is_no_unit_of_another_name():
    with pytest.raises(KeyError, match="Norbek"):
        parse_scenario(LEAST).unit("Norbek")
