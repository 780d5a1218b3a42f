"""Faults within one table: each is told with its line, key, rule, value and remedy, and nothing else is.

Every case changes one line of a sound scenario and expects exactly one fault, on that line, in these words.
Networks are invented.
"""

import re

import pytest

from sim.errors import ScenarioError
from sim.scenario import parse_scenario

SOUND = """\
schema = 1
title = "Two invented units"
[run]
seed = 4021
warm_up_days = 126
measured_days = 728
replications = 32
confidence = 0.95
[[units]]
name = "Ashgill"
beds = 12
closure_threshold = 11
incoming_threshold = 9
reopening_gap = 1
admit_while_closed = 0.0
review_hours = 0
target_utilisation = 0.75
referral_order = ["Norbeck"]
stay_factor = 1.0
[[units]]
name = "Norbeck"
beds = 18
[[patients]]
group = "Ashgill emergencies"
home = "Ashgill"
per_day = 2.1
day_of_week = [1, 1, 1, 1, 1, 0.8, 0.8]
stay = { family = "lognormal", mean_days = 3.9, cv = 1.4 }
[[patients]]
group = "Norbeck emergencies"
home = "Norbeck"
per_day = 3.3
stay = { family = "exponential", mean_days = 3.9 }
[diversion]
when_all_closed = "home_bed"
delay = { family = "erlang", mean_hours = 2.5, stages = 2 }
extra_days = 0.0
[game]
goal = { kind = "target_utilisation", shape = "absolute" }
welfare = { kind = "loss", transfer_weight = 0.3 }
strategies = { Ashgill = { from = 1, to = 12 }, Norbeck = { values = [6, 9] } }
[[policies]]
name = "close only when full"
closure_threshold = { Ashgill = 12, Norbeck = 18 }
"""


def faults_of(text, **options):
    """Every fault of a scenario text; none where it is sound."""
    try:
        parse_scenario(text, file="s.toml", **options)
    except ScenarioError as error:
        return list(error.faults)
    return []


def changed(old, new):
    """The sound scenario with its one line that begins with `old` written anew, and that line's number."""
    lines = SOUND.split("\n")
    (place,) = [place for place, line in enumerate(lines) if line.startswith(old)]
    lines[place] = new
    return "\n".join(lines), place + 1


def check(old, new, *expected):
    """The changed line has the expected faults, in order, and no other line has any."""
    text, line = changed(old, new)
    assert [fault.located("s.toml") for fault in faults_of(text)] == [
        f"s.toml:{line}: {said}" for said in expected
    ]


def test_the_sound_scenario_is_sound():
    assert faults_of(SOUND) == []


WRONG_KIND = {
    "beds = 12": [
        ("12.0", "must be a whole number, got 12.0, write for example `beds = 12`"),
        ("true", "must be a whole number, got true, write for example `beds = 12`"),
        ("'12'", "must be a whole number, got '12', write for example `beds = 12`"),
        ("2024-01-31", "must be a whole number, got 2024-01-31, write for example `beds = 12`"),
        ("07:30:00", "must be a whole number, got 07:30:00, write for example `beds = 12`"),
        ("[12]", "must be a whole number, got [12], write for example `beds = 12`"),
        ("[[12], {}]", "must be a whole number, got [[...], a table], write for example `beds = 12`"),
        ("{ icu = 12 }", "must be a whole number, got a table, write for example `beds = 12`"),
        ("nan", "must be a whole number, got nan, write for example `beds = 12`"),
    ],
    "admit_while_closed": [
        ("false", "must be a number, got false, write for example `admit_while_closed = 0.2`"),
        ("'soft'", "must be a number, got 'soft', write for example `admit_while_closed = 0.2`"),
    ],
    "referral_order": [
        ("'Norbeck'", 'must be an array, got \'Norbeck\', write for example `referral_order = ["Norbeck"]`'),
    ],
    "title": [("3", 'must be text in quotes, got 3, write for example `title = "Two invented units"`')],
}  # fmt: skip


@pytest.mark.parametrize(
    ("old", "value", "said"), [(k, *c) for k, cases in WRONG_KIND.items() for c in cases]
)
def test_a_value_of_the_wrong_kind(old, value, said):
    key = old.split()[0]
    path = key if key == "title" else f"units.Ashgill.{key}"
    check(old, f"{key} = {value}", f"{path}: {said}")


OUT_OF_BOUNDS = [
    ("seed", "-1", "run.seed: must be at least 0, got -1, raise it"),
    ("seed", "9223372036854775808",
     "run.seed: must be below 9,223,372,036,854,775,808, got 9223372036854775808, lower it"),
    ("warm_up_days", "-0.5", "run.warm_up_days: must be at least 0, got -0.5, raise it"),
    ("warm_up_days", "3_000_000", "run.warm_up_days: must be at most 1,000,000, got 3000000, lower it"),
    ("measured_days", "0", "run.measured_days: must be above 0, got 0, raise it"),
    ("replications", "0", "run.replications: must be at least 1, got 0, raise it"),
    ("confidence", "95", "run.confidence: must be below 1, got 95, lower it"),
    ("confidence", "0", "run.confidence: must be above 0, got 0, raise it"),
    ("beds = 12", "0", "units.Ashgill.beds: must be at least 1, got 0, raise it"),
    ("beds = 12", "1_000_000_000", "units.Ashgill.beds: must be at most 5,000, got 1000000000, lower it"),
    ("closure_threshold = 11", "-1", "units.Ashgill.closure_threshold: must be at least 0, got -1, raise it"),
    ("incoming", "-1", "units.Ashgill.incoming_threshold: must be at least 0, got -1, raise it"),
    ("reopening_gap", "0", "units.Ashgill.reopening_gap: must be at least 1, got 0, raise it"),
    ("admit", "1.01", "units.Ashgill.admit_while_closed: must be at most 1, got 1.01, lower it"),
    ("review_hours", "-8", "units.Ashgill.review_hours: must be at least 0, got -8, raise it"),
    ("target", "75", "units.Ashgill.target_utilisation: must be at most 1, got 75, lower it"),
    ("target", "0", "units.Ashgill.target_utilisation: must be above 0, got 0, raise it"),
    ("stay_factor", "0", "units.Ashgill.stay_factor: must be at least 0.01, got 0, raise it"),
    ("per_day = 2.1", "0", "patients.Ashgill emergencies.per_day: must be above 0, got 0, raise it"),
    ("per_day = 2.1", "1e300",
     "patients.Ashgill emergencies.per_day: must be at most 10,000, got 1e+300, lower it"),
    ("per_day = 2.1", "1e-12",
     "patients.Ashgill emergencies.per_day: must be at least 1e-9, a patient in three million years, "
     "got 1e-12, raise it, or remove the group"),
    ("extra_days", "-1", "diversion.extra_days: must be at least 0, got -1, raise it"),
]  # fmt: skip


@pytest.mark.parametrize(("old", "value", "said"), OUT_OF_BOUNDS)
def test_a_value_out_of_bounds(old, value, said):
    (line,) = [line for line in SOUND.split("\n") if line.startswith(old)]
    check(old, f"{line.split()[0]} = {value}", said)


NUMBERS = [line.split()[0] for line in SOUND.split("\n") if re.fullmatch(r"\w+ = [0-9.]+", line)]


@pytest.mark.parametrize(
    "value", ["nan", "inf", "-inf", "+nan", "1e400", "9" * 400, "-" + "9" * 400, "0x" + "f" * 300]
)
@pytest.mark.parametrize("key", sorted(set(NUMBERS)))
def test_no_key_takes_what_is_no_finite_number_of_sensible_size(key, value):
    old = next(line for line in SOUND.split("\n") if line.startswith(f"{key} = "))
    text, line = changed(old, f"{key} = {value}")
    (fault,) = faults_of(text)
    assert (fault.line, fault.key.split(".")[-1]) == (line, key)
    assert len(fault.located("s.toml")) < 250


@pytest.mark.parametrize("value", ["9" * 5000, "0x" + "f" * 5000, "1" + "_0" * 5000])
def test_integers_beyond_what_python_reads(value):
    check(
        "beds = 12",
        f"beds = {value}",
        "file: must be valid TOML, a number of thousands of digits, shorten it",
    )


TEXTS = [
    ('name = "Ashgill"', "''", "units.1.name: must hold something that can be read, got '', write a name"),
    ('name = "Ashgill"', "' A'",
     "units.' A'.name: must not begin or end with a space, got ' A', remove the space"),
    ('name = "Ashgill"', f"'{'A' * 201}'",
     f"units.{'A' * 197}....name: must have at most 200 characters, got 201, shorten it"),
    ('name = "Ashgill"', '"A\\u0007"',
     r"units.'A\x07'.name: must not hold control characters, got 'A\x07', remove them"),
    ('name = "Ashgill"', '"A\\nB"',
     r"units.'A\nB'.name: must not hold control characters, got 'A\nB', remove them"),
    ('name = "Ashgill"', "'network'",
     "units.network.name: is a reserved word (it stands for all units together), got 'network', "
     "choose another name"),
    ('group = "Ashgill', "''",
     "patients.1.group: must hold something that can be read, got '', write a name"),
    ("title", '"\\u001b[31m"', r"title: must not hold control characters, got '\x1b[31m', remove them"),
    ("when_all", "'home'", 'diversion.when_all_closed: must be one of "turned_away", "home_bed", "any_bed", '
     "got 'home', did you mean `home_bed`?"),
]  # fmt: skip


@pytest.mark.parametrize(("old", "value", "said"), TEXTS)
def test_texts(old, value, said):
    """A faulted unit's own name in a home, a strategy or a policy is not a fault of its own."""
    key = old.split()[0] if old != "when_all" else "when_all_closed"
    text, line = changed(old, f"{key} = {value}")
    text = text.replace('home = "Ashgill"', f"home = {value}") if key == "name" else text
    text = text.replace("{ Ashgill =", f"{{ {value} =") if key == "name" else text
    assert [fault.located("s.toml") for fault in faults_of(text)] == [f"s.toml:{line}: {said}"]


def test_a_group_may_be_called_network():
    assert faults_of(changed('group = "Ashgill', 'group = "network"')[0]) == []


UNKNOWN_KEYS = [
    ("title", "titel = 'x'", "titel: is not a known key of this table, got 'x', did you mean `title`?"),
    ("seed", "sed = 3", "run.sed: is not a known key of this table, got 3, did you mean `seed`?"),
    ("reopening_gap", "reopen_gap = 1",
     "units.Ashgill.reopen_gap: is not a known key of this table, got 1, did you mean `reopening_gap`?"),
    ("welfare", "welfare = { kind = 'throughput', transfer_weight = 1 }",
     "game.welfare.transfer_weight: is not a known key of this table, got 1, known here: `kind`"),
    ("extra_days", "delays = { family = 'constant' }",
     "diversion.delays: is not a known key of this table, got a table, did you mean `delay`?"),
]  # fmt: skip


@pytest.mark.parametrize(("old", "new", "said"), UNKNOWN_KEYS)
def test_unknown_keys_name_the_nearest_known_one(old, new, said):
    check(old, new, said)


def test_a_misspelt_required_key_is_both_unknown_and_missing():
    text, line = changed("per_day = 2.1", "per_dy = 2.1")
    assert [fault.located("s.toml") for fault in faults_of(text)] == [
        "s.toml:23: patients.Ashgill emergencies.per_day: is required, missing, "
        "add for example `per_day = 2.1`",
        f"s.toml:{line}: patients.Ashgill emergencies.per_dy: is not a known key of this table, got 2.1, "
        "did you mean `per_day`?",
    ]


MISSING = {
    "schema = 1": (1, "schema: is required, missing, add for example `schema = 1`"),
    'name = "Norbeck"': (20, 'units.2.name: is required, missing, add for example `name = "Ashgill"`'),
    "beds = 18": (20, "units.Norbeck.beds: is required, missing, add for example `beds = 12`"),
    'group = "Norbeck': (
        29, 'patients.2.group: is required, missing, add for example `group = "Ashgill emergencies"`'),
    'home = "Norbeck"': (
        29, 'patients.Norbeck emergencies.home: is required, missing, add for example `home = "Ashgill"`'),
    "per_day = 3.3": (
        29, "patients.Norbeck emergencies.per_day: is required, missing, add for example `per_day = 2.1`"),
    'stay = { family = "exponential"': (
        29, "patients.Norbeck emergencies.stay: is required, missing, add for example "
        '`stay = { family = "lognormal", mean_days = 3.9, cv = 1.4 }`'),
    'name = "close': (
        42, 'policies.1.name: is required, missing, add for example `name = "close only when full"`'),
}  # fmt: skip


@pytest.mark.parametrize("old", MISSING)
def test_a_missing_key_is_told_at_its_tables_line(old):
    text, _ = changed(old, "# taken out")
    line, said = MISSING[old]
    assert [fault.located("s.toml") for fault in faults_of(text)] == [f"s.toml:{line}: {said}"]


INLINE = [
    ('stay = { family = "exponential"', "stay = { family = 'gamma', mean_days = 3 }",
     "patients.Norbeck emergencies.stay.cv: is required, missing, add for example `cv = 1.4`"),
    ('stay = { family = "exponential"', "stay = { family = 'exponential', mean_days = 0 }",
     "patients.Norbeck emergencies.stay.mean_days: must be above 0, got 0, raise it"),
    ('stay = { family = "exponential"', "stay = { mean_days = 3 }",
     "patients.Norbeck emergencies.stay.family: is required, missing, add `family = ...`"),
    ('stay = { family = "exponential"', "stay = 3.9",
     "patients.Norbeck emergencies.stay: must be a table, got 3.9, write for example "
     '`stay = { family = "lognormal", mean_days = 3.9, cv = 1.4 }`'),
    ('stay = { family = "exponential"', "stay = { family = 'mixture' }",
     "patients.Norbeck emergencies.stay.parts: is required, missing, add for example "
     '`parts = [{ family = "exponential", mean_days = 3.9, weight = 1 }]`'),
    ('stay = { family = "exponential"',
     "stay = { family = 'mixture', parts = [{ family = 'constant', mean_days = 1, weight = 0 }] }",
     "patients.Norbeck emergencies.stay.parts: must give at least one part a weight above 0, got only 0, "
     "raise one"),
    ('stay = { family = "exponential"', "stay = { family = 'coxian', rates_per_day = [1, 2], goes_on = [] }",
     "patients.Norbeck emergencies.stay.goes_on: needs one entry fewer than the rates (a patient may go on "
     "after every phase but the last), got 0, give 1"),
    ("delay", "delay = { family = 'constant' }",
     "diversion.delay.mean_hours: is required, missing, add for example `mean_hours = 3.9`"),
    ("goal", "goal = { kind = 'throughputs' }",
     "game.goal.kind: must be one of \"target_utilisation\", \"turned_away\", \"own_moved\", \"diversions_in\", "
     "\"closed_time\", \"free_bed\", \"throughput\", \"weighted\", got 'throughputs', did you mean `throughput`?"),
    ("goal", "goal = { shape = 'square' }",
     'game.goal.shape: must be one of "absolute", "squared", "above", got \'square\', did you mean `squared`?'),
    ("welfare", "welfare = { transfer_weight = 1 }",
     "game.welfare.kind: is required, missing, add `kind = ...`"),
    ("strategies", "strategies = { Ashgill = { from = 5 } }",
     "game.strategies.Ashgill: needs either both `from` and `to`, or `values`, got `from`, "
     "give one of the two"),
    ("strategies", "strategies = { Ashgill = { from = 5, values = [5] } }",
     "game.strategies.Ashgill: needs either both `from` and `to`, or `values`, got `from` and `values`, "
     "give one of the two"),
    ("strategies", "strategies = { Ashgill = {} }",
     "game.strategies.Ashgill: needs either both `from` and `to`, or `values`, got neither, "
     "give one of the two"),
    ("strategies", "strategies = { Ashgill = { from = 5, to = 2 } }",
     "game.strategies.Ashgill.from: must not be above `to`, got 5 above 2, swap or correct them"),
    ("strategies", "strategies = { Ashgill = { values = [5, 6, 5] } }",
     "game.strategies.Ashgill.values.3: must not repeat a threshold, got 5 again, remove it"),
    ("strategies", "strategies = { Ashgill = { values = [] } }",
     "game.strategies.Ashgill.values: must not be empty, got [], add an entry"),
    ("closure_threshold = { A", "closure_threshold = 12",
     "policies.close only when full.closure_threshold: must be a table, got 12, "
     "write `closure_threshold = { UNIT = ... }`"),
    ("closure_threshold = { A", "closure_threshold = { Ashgill = 9.5 }",
     "policies.close only when full.closure_threshold.Ashgill: must be a whole number, got 9.5, "
     "write a whole number"),
]  # fmt: skip


@pytest.mark.parametrize(("old", "new", "said"), INLINE)
def test_inline_tables(old, new, said):
    check(old, new, said)


def test_entries_of_an_array_are_told_on_their_own_lines():
    week = "day_of_week = [\n  1, 1, # Monday and Tuesday\n  -1,\n\n  'x', 1, 1,\n  nan,\n]"
    text, line = changed("day_of_week", week)
    assert [(fault.line, fault.key.split(".")[-1], fault.rule) for fault in faults_of(text)] == [
        (line + 2, "3", "must be at least 0"),
        (line + 4, "4", "must be a number"),
        (line + 5, "7", "must be a finite number"),
    ]


@pytest.mark.parametrize(
    ("week", "said"),
    [
        ("[1, 1, 1]", "must have at least 7 entries, got 3, add the others"),
        ("[1, 1, 1, 1, 1, 1, 1, 1]", "must have at most 7 entries, got 8, remove some"),
        (
            "[0, 0, 0, 0, 0, 0, 0.0]",
            "must hold at least one weight above 0, got only 0, raise one, or remove the key",
        ),
        ("3", "must be an array, got 3, write for example `day_of_week = [1, 1, 1, 1, 1, 0.8, 0.8]`"),
    ],
)
def test_weekday_weights(week, said):
    check("day_of_week", f"day_of_week = {week}", f"patients.Ashgill emergencies.day_of_week: {said}")


@pytest.mark.parametrize(
    ("table", "said"),
    [
        ("run = 3", "run: must be a table, got 3, write for example `[run]`"),
        ("game = [1]", "game: must be a table, got [1], write for example `[game]`"),
        ("policies = 'x'",
         "policies: must be an array, got 'x', write for example "
         "`[[policies]]` with `name = \"close only when full\"`"),
    ],
)  # fmt: skip
def test_a_table_that_is_none(table, said):
    name = table.split()[0]
    without = re.sub(rf"\[+{name}\]+\n(?:\w.*\n)*", "", SOUND)
    assert [f.located("s.toml") for f in faults_of(f"{table}\n{without}")] == [f"s.toml:1: {said}"]


def test_an_empty_file_misses_what_every_file_needs():
    assert [(fault.line, fault.key) for fault in faults_of("")] == [
        (1, "patients"),
        (1, "schema"),
        (1, "units"),
    ]


def test_another_schema():
    check(
        "schema",
        "schema = 2",
        "schema: must be 1, the only form of scenario files so far, got 2, write `schema = 1`",
    )


def test_thousands_of_units_are_too_many():
    text = SOUND + "".join(f'[[units]]\nname = "U{number}"\nbeds = 1\n' for number in range(3000))
    (fault,) = faults_of(text)
    assert (fault.line, fault.key, fault.rule, fault.value) == (
        9,
        "units",
        "must have at most 200 entries",
        "got 3,002",
    )
