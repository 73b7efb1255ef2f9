"""Every fault of a model file is reported, with its line, its key and what was expected, and all in one go."""

from __future__ import annotations

import pytest

from plant_models.errors import ModelFileError
from plant_models.model_file import parse_model_text

SOUND = """\
[unit]
name = "R-210"
title = "Reactor"
sample_time = "10 s"

[[input]]
tag = "FI1"
unit = "m3/h"
operating_point = 11.5
range = [0.0, 20.0]

[[input]]
tag = "FI2"
unit = "kg/h"
operating_point = 1.0
range = [0.0, 2.0]

[[sensor]]
tag = "TI1"
unit = "degC"
operating_point = 92.4
range = [0.0, 200.0]
noise_sd = 0.15

[[estimate]]
tag = "AY1"
unit = "mol/L"
operating_point = 1.32
range = [0.0, 4.0]
lab = { tag = "AL1", sd = 0.02 }

[[disturbance]]
name = "feed"
sd = 0.08
time_constant = "1.5 h"

[[transfer_function]]
from = "FI1"
to = "TI1"
gain = -1.9
time_constants = ["4.2 min"]

[[transfer_function]]
from = "FI2"
to = "TI1"
gain = 1.0
time_constants = ["1 min"]
lead_times = []
dead_time = "1 min"

[[transfer_function]]
from = "feed"
to = "AY1"
numerator = [2.0]
denominator = [16.7, 1.0]
time_unit = "min"

[fault_tests]
false_flag_interval = "30 d"
"""

FI1_TO_TI1 = """[[transfer_function]]
from = "FI1"
to = "TI1"
gain = -1.9
time_constants = ["4.2 min"]
"""
AT_FI1 = '\n[[disturbance]]\nname = "wander"\nsd = 1.0\ntime_constant = "1 h"\nat_input = "FI1"\n'
FEED_PATH = 'denominator = [16.7, 1.0]\ntime_unit = "min"\n'

# (what stands in the sound file, what replaces it, the fault's key, part of its message). The fault's line is the one
# with "#!" in it, which a replacement carries.
FAULTS = [
    # keys
    ('[unit]\nname = "R-210"\n', "[unit] #!\n", "name", "missing; expected a name"),
    ('sample_time = "10 s"', "", "sample_time", "missing; expected a time with its unit"),
    ('[[input]]\ntag = "FI1"\nunit = "m3/h"\n', '[[input]] #!\ntag = "FI1"\n', "unit", "missing; expected a unit"),
    ("[[sensor]]", "[[sensor]] #!", "noise_sd", "missing; expected a finite number above zero"),
    ("[[estimate]]", "[[estimate]] #!", "operating_point", "missing; expected a finite number"),
    ("[[estimate]]", "[[estimate]] #!", "range", "missing; expected two finite numbers, the lower first"),
    ("[[disturbance]]", "[[disturbance]] #!", "time_constant", "missing; expected a time with its unit"),
    ('lab = { tag = "AL1", sd = 0.02 }', 'lab = { tag = "AL1" } #!', "lab.sd", "missing; expected a finite number"),
    ('lab = { tag = "AL1", sd = 0.02 }', "lab = { sd = 0.02 } #!", "lab.tag", "missing; expected a tag"),
    ("noise_sd = 0.15", "noise_sd = 0.15\nnoise = 1 #!", "noise", "transform, noise_sd, tolerance, bias_walk_sd"),
    ("sd = 0.02 }", "sd = 0.02, unit = 1 } #!", "lab.unit", "unknown key, expected one of tag, sd"),
    ('name = "feed"', 'name = "feed"\ngain = 1 #!', "gain", "unknown key, expected one of name, sd, time_constant"),
    ("[fault_tests]", "[fault_tests]\nfalse_alarm = 1 #!", "false_alarm", "unknown key"),
    ("[fault_tests]", "[fault_test] #!", "fault_test", "; did you mean 'fault_tests'?"),
    ("[unit]", "extra = 1 #!\n[unit]", "extra", "unknown section, expected one of unit, input"),
    # kinds of values
    ('name = "R-210"', "name = 210 #!", "name", "expected a name such as 'feed concentration'; got 210"),
    ('name = "R-210"', 'name = "" #!', "name", "got ''"),
    ('title = "Reactor"', 'title = " " #!', "title", "expected a text that is not empty"),
    ('tag = "TI1"\nunit', 'tag = "TI1 " #!\nunit', "tag", "begins or ends with a space"),
    ('tag = "TI1"\nunit', 'tag = "A; B" #!\nunit', "tag", "separate tags in results"),
    ('tag = "TI1"\nunit', 'tag = "time" #!\nunit', "tag", "meaning of its own in history files"),
    ('tag = "TI1"\nunit', 'tag = "TI1.quality" #!\nunit', "tag", "meaning of its own in history files"),
    ('tag = "TI1"\nunit', 'tag = "TI\\n1" #!\nunit', "tag", "expected a tag such as"),
    ('tag = "TI1"\nunit', f'tag = "{"T" * 101}" #!\nunit', "tag", "longer than 100 characters"),
    ('unit = "m3/h"', 'unit = "m3/hh" #!', "unit", "expected a unit such as"),
    ('unit = "m3/h"', "unit = 3 #!", "unit", "expected a unit such as"),
    ("operating_point = 92.4", 'operating_point = "92.4" #!', "operating_point", "got '92.4', which is no number"),
    ("operating_point = 92.4", "operating_point = true #!", "operating_point", "expected a finite number; got true"),
    ("operating_point = 92.4", "operating_point = nan #!", "operating_point", "expected a finite number; got nan"),
    ("operating_point = 92.4", "operating_point = 1979-05-27 #!", "operating_point", "expected a finite number"),
    ("operating_point = 92.4", f"operating_point = {'9' * 400} #!", "operating_point", "too large"),
    ("operating_point = 92.4", f"operating_point = 0x{'f' * 5000} #!", "operating_point", "too long to show"),
    ("noise_sd = 0.15", "noise_sd = 0 #!", "noise_sd", "expected a finite number above zero; got 0"),
    ("noise_sd = 0.15", "noise_sd = -0.15 #!", "noise_sd", "expected a finite number above zero; got -0.15"),
    ("noise_sd = 0.15", "noise_sd = inf #!", "noise_sd", "expected a finite number above zero; got inf"),
    ("noise_sd = 0.15", "noise_sd = 1e308 #!", "noise_sd", "too large"),
    ("noise_sd = 0.15", "noise_sd = 0.15\ntolerance = 0.0 #!", "tolerance", "expected a finite number above zero"),
    ("noise_sd = 0.15", "noise_sd = 0.15\non_change = 1 #!", "on_change", "expected true or false; got 1"),
    ("noise_sd = 0.15", "noise_sd = 0.15\nbias_walk_sd = -1 #!", "bias_walk_sd", "not below zero; got -1"),
    ("noise_sd = 0.15", "noise_sd = 0.15\nbias_initial_sd = -1 #!", "bias_initial_sd", "not below zero; got -1"),
    ("noise_sd = 0.15", "noise_sd = 0.15\ngate = 0 #!", "gate", "expected a finite number above zero; got 0"),
    ("noise_sd = 0.15", "noise_sd = 0.15\ngate = 'off' #!", "gate", "above zero; got 'off', which is no number"),
    ("noise_sd = 0.15", "noise_sd = 0.15\nmax_age = 60 #!", "max_age", "in quotation marks; got 60"),
    ("range = [0.0, 2.0]", 'range = [0.0, 2.0]\nmax_age = "0 s" #!', "max_age", "above zero; got '0 s'"),
    ("sd = 0.02 }", "sd = 0 } #!", "lab.sd", "expected a finite number above zero"),
    ("range = [0.0, 4.0]", "range = [0.0, 4.0]\ninterval_scale = 0 #!", "interval_scale", "above zero; got 0"),
    ('lab = { tag = "AL1", sd = 0.02 }', 'lab = "AL1" #!', "lab", "expected a table such as"),
    ('false_flag_interval = "30 d"', "false_flag_interval = 30 #!", "false_flag_interval", "in quotation marks"),
    ('false_flag_interval = "30 d"', 'false_flag_interval = "0 d" #!', "false_flag_interval", "above zero"),
    # times
    ('sample_time = "10 s"', "sample_time = 10 #!", "sample_time", 'such as "10 s", "4.2 min", "2 h" or "30 d"'),
    ('sample_time = "10 s"', 'sample_time = "10" #!', "sample_time", "which has no unit"),
    ('sample_time = "10 s"', 'sample_time = "0 s" #!', "sample_time", "above zero; got '0 s'"),
    ('sample_time = "10 s"', 'sample_time = "-1 s" #!', "sample_time", "not below zero"),
    ('sample_time = "10 s"', 'sample_time = "1 fortnight" #!', "sample_time", "none of ms, s, min, h, d, week"),
    ('sample_time = "10 s"', 'sample_time = "0.0000015 s" #!', "sample_time", "no whole number of microseconds"),
    ('sample_time = "10 s"', 'sample_time = "1e300 s" #!', "sample_time", "longer than a thousand years"),
    ('false_flag_interval = "30 d"', 'false_flag_interval = "1e9 d" #!', "false_flag_interval", "a thousand years"),
    ("lead_times = []", 'lead_times = ["-1e9 d"] #!', "lead_times", "longer than a thousand years"),
    ('dead_time = "1 min"', 'dead_time = "200 d" #!', "dead_time", "at most 1000000 sample times of 10 s; got 200 d"),
    (FEED_PATH, FEED_PATH + 'dead_time = "6 h" #!\n', "dead_time", "at most 2000 sample times of 10 s where a disturbance"),
    ('dead_time = "1 min"', 'dead_time = "-1 min" #!', "dead_time", "not below zero"),
    ('dead_time = "1 min"', "dead_time = 1.0 #!", "dead_time", "in quotation marks"),
    ('time_constants = ["1 min"]', 'time_constants = ["-1 min"] #!', "time_constants", "item 1 is not"),
    ('time_constants = ["1 min"]', 'time_constants = ["1 min", "0 s"] #!', "time_constants", "item 2 is not"),
    ('time_constants = ["1 min"]', "time_constants = [60] #!", "time_constants", "in quotation marks; got 60"),
    ('time_constants = ["1 min"]', 'time_constants = "1 min" #!', "time_constants", "which is no list"),
    ("lead_times = []", 'lead_times = ["0 s"] #!', "lead_times", "a lead of zero does nothing"),
    ("lead_times = []", "lead_times = [1.0] #!", "lead_times", "item 1 is not"),
    # ranges
    ("range = [0.0, 2.0]", "range = [2.0, 0.0] #!", "range", "the first is not below the second"),
    ("range = [0.0, 2.0]", "range = [1.0, 1.0] #!", "range", "the first is not below the second"),
    ("range = [0.0, 2.0]", "range = [0.0] #!", "range", "expected two finite numbers"),
    ("range = [0.0, 2.0]", "range = [0.0, inf] #!", "range", "expected two finite numbers"),
    ("range = [0.0, 2.0]", 'range = "0-2" #!', "range", "expected two finite numbers"),
    ("range = [0.0, 2.0]", "range = [ #!\n0.0,\nnan]", "range", "expected two finite numbers"),
    ("operating_point = 11.5", "operating_point = 21.5 #!", "operating_point", "within range, 0 to 20; got 21.5"),
    ("range = [0.0, 2.0]", "range = [0.0, 2.0]\nvalidated_range = [1.0, 3.0] #!", "validated_range", "0 to 2"),
    ("range = [0.0, 2.0]", "range = [0.0, 2.0]\nvalidated_range = [2, 1] #!", "validated_range", "first is not below"),
    # names
    ('tag = "FI2"', 'tag = "FI1" #!', "tag", "expected a tag of its own; 'FI1' is used in line 7 already"),
    ('tag = "TI1"\nunit', 'tag = "FI1" #!\nunit', "tag", "'FI1' is used in line 7 already"),
    ('tag = "AL1"', 'tag = "TI1" #!\n'.replace(" #!\n", ""), "lab.tag", "'TI1' is used in line"),
    ('name = "feed"', 'name = "AY1" #!', "name", "expected a name of its own; 'AY1' is used in line"),
    # disturbances
    ("sd = 0.08\n", "sd = 0 #!\n", "sd", "expected a finite number above zero"),
    ("sd = 0.08\n", "sd = 0.08\nwalk_sd = 0.1 #!\n", "walk_sd", "got some of both"),
    ("sd = 0.08\n", "sd = 0.08\ninitial_sd = 0.1 #!\n", "initial_sd", "got some of both"),
    ('sd = 0.08\ntime_constant = "1.5 h"', "walk_sd = -1 #!", "walk_sd", "above zero; got -1"),
    ('sd = 0.08\ntime_constant = "1.5 h"', "walk_sd = 1\ninitial_sd = -1 #!", "initial_sd", "not below zero"),
    ('time_constant = "1.5 h"', "time_constant = 1.5 #!", "time_constant", "in quotation marks"),
    ('time_constant = "1.5 h"', 'time_constant = "0 h" #!', "time_constant", "above zero"),
    ("sd = 0.08\n", 'sd = 0.08\nat_input = "FI3" #!\n', "at_input", "expected an input's tag; got 'FI3'; did you mean"),
    ("sd = 0.08\n", 'sd = 0.08\nat_input = "TI1" #!\n', "at_input", "got 'TI1', which is a sensor"),
    # the ends of paths
    ('from = "FI1"', 'from = "F1" #!', "from", "an input's tag or a disturbance's name; got 'F1'; did you mean 'FI1'?"),
    ('from = "FI1"', 'from = "fi1" #!', "from", "did you mean 'FI1'?"),
    ('from = "FI1"', "from = 1 #!", "from", "expected an input's tag or a disturbance's name; got 1"),
    ('to = "AY1"', 'to = "AY2" #!', "to", "a sensor's or an estimate's tag; got 'AY2'; did you mean 'AY1'?"),
    # one path for a pair, and something at either end
    ("[fault_tests]", FI1_TO_TI1.replace('to = "TI1"', 'to = "TI1" #!') + "[fault_tests]", "to",
     "expected one path from FI1 to TI1; the first is in line 37"),
    # gains
    ("gain = 1.0", "gain = nan #!", "gain", "expected a finite number other than zero; got nan"),
    ("gain = 1.0", "gain = inf #!", "gain", "expected a finite number other than zero; got inf"),
    ("gain = 1.0", "gain = 0 #!", "gain", "expected a finite number other than zero; got 0"),
    ("gain = 1.0", 'gain = "1" #!', "gain", "which is no number"),
    ("gain = 1.0", "gain = 1e-323 #!\nintegrating = true\ntime_unit = 'week'", "gain", "which is too small"),
    # properness and stability
    ("lead_times = []", 'lead_times = ["1 s", "2 s"] #!', "lead_times", "no more lead times than time constants"),
    ("numerator = [2.0]", "numerator = [1, 1, 1] #!", "numerator", "no higher degree than the denominator; got 2"),
    ("numerator = [2.0]", "numerator = [0.0, 0.0] #!", "numerator", "a coefficient other than zero"),
    ("numerator = [2.0]", "numerator = [] #!", "numerator", "expected a list of finite numbers in descending"),
    ("numerator = [2.0]", "numerator = [nan] #!", "numerator", "expected a list of finite numbers"),
    ("numerator = [2.0]", "numerator = 2.0 #!", "numerator", "expected a list of finite numbers"),
    ("numerator = [2.0]", "numerator = [true] #!", "numerator", "expected a list of finite numbers"),
    ("denominator = [16.7, 1.0]", "denominator = [0.0, 16.7, 1.0] #!", "denominator", "first coefficient other than"),
    ("denominator = [16.7, 1.0]", "denominator = [16.7, -1.0] #!", "denominator", "in the left half plane"),
    ("denominator = [16.7, 1.0]", "denominator = [1, 0, 4] #!", "denominator", "in the left half plane"),
    ("denominator = [16.7, 1.0]", "denominator = [1, 1, 1, 5] #!", "denominator", "in the left half plane"),
    ("denominator = [16.7, 1.0]", "denominator = [1, -1, 0] #!", "denominator", "in the left half plane"),
    ("denominator = [16.7, 1.0]", "denominator = [1, 1, 0, 0] #!", "denominator", "at most one pole at the origin"),
    ("denominator = [16.7, 1.0]", f"denominator = {[1] * 22} #!", "denominator", "a degree of at most 20; got 21"),
    ("numerator = [2.0]\ndenominator = [16.7, 1.0]", "numerator = [1, 0] #!\ndenominator = [1, 1, 0]", "numerator",
     "expected no common factor"),
    ('denominator = [16.7, 1.0]\ntime_unit = "min"', 'denominator = [1e308, 1.0] #!\ntime_unit = "min"',
     "denominator", "overflow in seconds"),
    (f"numerator = [2.0]\n{FEED_PATH}", "numerator = [2.0] #!\n".replace(" #!", "") + 'time_unit = "min"\n',
     "denominator", "missing; expected a list of finite numbers"),
    (FEED_PATH, 'denominator = [16.7, 1.0]\ntime_unit = "month" #!\n', "time_unit", "expected a unit of time"),
    (FEED_PATH, 'denominator = [16.7, 1.0]\ntime_unit = "1 min" #!\n', "time_unit", "expected a unit of time"),
    ("gain = 1.0", 'gain = 1.0\ntime_unit = "m" #!', "time_unit", "expected a unit of time"),
    # both forms
    ("numerator = [2.0]", "numerator = [2.0]\ngain = 1.0 #!", "gain", "either gain with time_constants or numerator"),
    ("numerator = [2.0]", "numerator = [2.0]\nintegrating = true #!", "integrating", "either gain with time_constants"),
    ("gain = 1.0", "gain = 1.0\nintegrating = 1 #!", "integrating", "expected true or false"),
]  # fmt: skip

REMOVED_KEYS = {"noise_sd": "noise_sd = 0.15\n", "time_constant": 'time_constant = "1.5 h"\n',
                "operating_point": "operating_point = 1.32\n", "range": "range = [0.0, 4.0]\n"}  # fmt: skip


def faults_of(text: str) -> list[tuple[int, str, str]]:
    with pytest.raises(ModelFileError) as refusal:
        parse_model_text(text, "model.toml")
    assert refusal.value.lines == tuple(str(fault) for fault in refusal.value.faults)
    return [(fault.line, fault.key, fault.message) for fault in refusal.value.faults]


def line_of(text: str, part: str) -> int:
    return text[: text.index(part)].count("\n") + 1


def test_the_file_that_the_faults_are_put_into_is_sound() -> None:
    assert parse_model_text(SOUND, "model.toml").name == "R-210"


@pytest.mark.parametrize(("old", "new", "key", "said"), FAULTS)
def test_a_fault_is_reported_at_its_line_under_its_key(old: str, new: str, key: str, said: str) -> None:
    assert SOUND.count(old) >= 1
    text = SOUND
    if old == new.removesuffix(" #!"):  # a header that is marked: the key is taken out below it
        text = text.replace(REMOVED_KEYS[key], "", 1)
    text = text.replace(old, new, 1)
    found = [fault for fault in faults_of(text) if fault[1] == key and said in fault[2]]
    assert found, faults_of(text)
    if "#!" in text:
        assert [line for line, _, _ in found] == [line_of(text, "#!")]


# Faults of the whole file: (what stands in the sound file, what replaces it, all faults that follow).
WHOLE = [
    ("[[sensor]]", "[sensor]", [(18, "sensor", "expected [[sensor]] in double brackets, one for each; got one table")]),
    ("[unit]", "[[unit]]", [(1, "unit", "expected one table [unit]; got double brackets")]),
    (
        FI1_TO_TI1,
        "",
        [(7, "tag", "expected a transfer function from FI1; it drives nothing")],
    ),
    (
        SOUND[SOUND.index('[[transfer_function]]\nfrom = "feed"') : SOUND.index("[fault_tests]")],
        "",
        [
            (26, "tag", "expected a transfer function to AY1; nothing drives it"),
            (33, "name", "expected a transfer function from feed; it drives nothing"),
        ],
    ),
    (
        SOUND[SOUND.index("[[estimate]]") : SOUND.index("[[disturbance]]")],
        "",
        [
            (1, "estimate", "missing; expected at least one [[estimate]]"),
            (46, "to", "expected a sensor's or an estimate's tag; got 'AY1'"),
        ],
    ),
    (
        SOUND[: SOUND.index("[[input]]")],
        "",
        [(1, "unit", "missing; expected [unit]")],
    ),
    ('from = "FI1"\nto = "TI1"', 'from = "TI1"\nto = "FI1"', [
        (38, "from", "expected an input's tag or a disturbance's name; got 'TI1', which is a sensor"),
        (39, "to", "expected a sensor's or an estimate's tag; got 'FI1', which is an input"),
    ]),
    ('sd = 0.08\ntime_constant = "1.5 h"', "", [
        (32, "sd", "missing; expected sd with time_constant, or walk_sd with initial_sd"),
    ]),
    ("[fault_tests]", AT_FI1 + '[[transfer_function]]\nfrom = "wander"\nto = "TI1"\ngain = 1.0\n', [
        (66, "to", "expected one path from wander to TI1; another follows from at_input = 'FI1' in line 63"),
    ]),
    ("[fault_tests]", AT_FI1 + "[fault_tests]", []),
]  # fmt: skip


@pytest.mark.parametrize(("old", "new", "expected"), WHOLE)
def test_one_slip_is_one_fault_and_what_follows_from_it(
    old: str, new: str, expected: list[tuple[int, str, str]]
) -> None:
    assert SOUND.count(old) == 1
    text = SOUND.replace(old, new)
    if 'to = "TI1"\ngain = 1.0\n' in new:
        text = text.replace('false_flag_interval = "30 d"\n', "")
    if expected:
        assert faults_of(text) == expected
    else:
        assert parse_model_text(text, "model.toml").disturbances[-1].at_input == "FI1"


SYNTAX = [
    ("gain = 1.0", "gain = 1.0 1", 46, "gain", "expected newline or end of document after a statement"),
    ("gain = 1.0", "gain =", 46, "gain", "invalid value"),
    ("gain = 1.0", "gain = 1.0\ngain = 2.0", 47, "gain", "cannot overwrite a value"),
    ("[fault_tests]", "[unit]", 58, "", "cannot declare ('unit',) twice"),
    ("[fault_tests]", "[fault_tests", 58, "", "expected ']'"),
    ('interval = "30 d"', 'interval = "30 d', 59, "false_flag_interval", "illegal character"),
    ("[unit]", "\x00[unit]", 1, "", "invalid statement"),
    ("gain = 1.0", f"gain = {'9' * 5000}", 1, "", "more digits than can be read"),
    ("gain = 1.0", f"gain = {'[' * 5000}", 1, "", "nested too deep"),
]


@pytest.mark.parametrize(("old", "new", "line", "key", "said"), SYNTAX)
def test_broken_toml_is_one_fault_with_its_line(old: str, new: str, line: int, key: str, said: str) -> None:
    found = faults_of(SOUND.replace(old, new, 1))
    assert len(found) == 1
    assert found[0][:2] == (line, key)
    assert "expected TOML" in found[0][2]
    assert said in found[0][2]


def test_many_faults_are_all_reported_at_once_in_the_order_of_their_lines() -> None:
    """Every replacement below leaves a fault of its own; none hides another."""
    slips = [
        ('name = "R-210"', "nmae = 1", [(1, "name"), (2, "nmae")]),
        ('sample_time = "10 s"', "sample_time = 10", [(4, "sample_time")]),
        ('unit = "m3/h"', 'unit = "m3/hh"', [(8, "unit")]),
        ("range = [0.0, 2.0]", "range = [2.0, nan]", [(16, "range")]),
        ("noise_sd = 0.15", "noise_sd = false", [(23, "noise_sd")]),
        ("sd = 0.02 }", "sd = -0.02, x = 1 }", [(30, "lab.x"), (30, "lab.sd")]),
        ("sd = 0.08", "sd = 0.0", [(34, "sd")]),
        ('from = "FI1"', 'from = "FI11"', [(38, "from")]),
        ("gain = -1.9", "gain = nan", [(40, "gain")]),
        ('dead_time = "1 min"', "dead_time = 1", [(49, "dead_time")]),
        ("denominator = [16.7, 1.0]", "denominator = [16.7, -1.0]", [(55, "denominator")]),
        ('time_unit = "min"', 'time_unit = "month"', [(56, "time_unit")]),
        ("[fault_tests]", "[alarms]", [(58, "alarms")]),
    ]
    text = SOUND
    for old, new, _ in slips:
        assert old in text
        text = text.replace(old, new, 1)
    assert [fault[:2] for fault in faults_of(text)] == [place for _, _, places in slips for place in places]


def test_a_message_names_file_line_key_and_expectation() -> None:
    with pytest.raises(ModelFileError) as refusal:
        parse_model_text(SOUND.replace("noise_sd = 0.15", "noise_sd = -1"), "plant/r210.toml")
    expected = "plant/r210.toml:23: noise_sd: expected a finite number above zero; got -1"
    assert refusal.value.lines == (expected,)


def test_a_key_or_value_with_line_ends_stays_one_line() -> None:
    text = SOUND.replace("noise_sd = 0.15", 'noise_sd = "a\\nb"\n"c\\nd" = 1')
    with pytest.raises(ModelFileError) as refusal:
        parse_model_text(text, "f")
    assert all("\n" not in line for line in refusal.value.lines)
    assert len(refusal.value.lines) == 2
