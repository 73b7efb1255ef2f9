"""The handbook agrees with the program: its examples are read by the real parsers, its lists and limits are the code's."""

from __future__ import annotations

import io
import re
import shlex
import tomllib
from importlib import resources
from pathlib import Path
from typing import Any

import pytest
from rich.console import Console
from typer.main import get_command

from connectors.files import read_history, read_lab, read_late
from plant_models import model_checks, model_kinds, model_paths, stochastic
from plant_models.durations import SECONDS, format_duration, parse_duration
from plant_models.errors import ModelFileError
from plant_models.model_file import parse_model_text
from plant_models.model_sections import FALSE_FLAG_INTERVAL
from plant_models.simulators import reactor_model_path
from plant_models.specification import GATE, UnitSpec
from plant_models.unit_spellings import PREFIXED, WHOLE
from softsensor import cycle, layout, published, unit_design
from softsensor.cli.check import as_document, print_table
from softsensor.detection import (
    absorbed_faults,
    beginning,
    design_of_tests,
    diagnosis,
    isolability,
    outcomes,
    reading_tests,
    sheet,
    single_faults,
)
from softsensor.errors import SiteFileError
from softsensor.estimation import gate, lab_results, what_helps
from softsensor.estimation.noise_tuning import archive_checks, interval_scale, separability
from softsensor.records import changes, storing, tables
from softsensor.service import assembly, live, result_tables, smoothed_window, tuning
from softsensor.service.model_report import model_report
from softsensor.service.report_tables import ReportTable, knowledge_tables
from softsensor.service.sheet_tables import sheet_tables
from softsensor.service.site_file import read_site_file
from softsensor.web import flag_sheet, review_period

HANDBOOK = resources.files("softsensor.handbook")
CHAPTERS = {
    file.name: file.read_text(encoding="utf-8")
    for file in sorted(HANDBOOK.iterdir(), key=lambda file: file.name)
    if file.name.endswith(".md")
}
README = (Path(__file__).parents[1] / "README.md").read_text(encoding="utf-8")
AFTER = CHAPTERS["08-after-a-flag.md"]
REFERENCE, METHOD = CHAPTERS["03-model-file.md"], CHAPTERS["04-method.md"]
TUNING = CHAPTERS["07-tuning.md"]
SHEET = CHAPTERS["09-detectability.md"]
FILES, FIRST_HOUR = CHAPTERS["05-files-and-results.md"], CHAPTERS["02-first-hour.md"]
ENVIRONMENT = {"PLANT_PASSWORD": "secret"}

BLOCK = re.compile(r"^```(\w+)\n(.*?)^```$", re.MULTILINE | re.DOTALL)


def blocks(language: str, text: str) -> list[str]:
    """The fenced blocks of one language."""
    return [found[2] for found in BLOCK.finditer(text) if found[1] == language]


def all_blocks(language: str) -> list[object]:
    """The same of every chapter, as parameters of a test."""
    return [
        pytest.param(block, id=f"{name} {number}")
        for name, text in CHAPTERS.items()
        for number, block in enumerate(blocks(language, text), start=1)
    ]


def section(text: str, heading: str) -> str:
    """What stands under one heading, up to the next of the same or a higher level."""
    level = len(heading) - len(heading.lstrip("#"))
    begin = text.index(f"\n{heading}\n") + len(heading) + 2
    following = re.search(rf"^#{{1,{level}}} ", text[begin:], re.MULTILINE)
    return text[begin : begin + following.start()] if following else text[begin:]


def table_rows(text: str) -> dict[str, list[str]]:
    """Rows of Markdown tables by each code word in their first cell; the cells after it."""
    found: dict[str, list[str]] = {}
    for line in text.splitlines():
        if not line.startswith("| `"):
            continue
        first, *others = (cell.strip() for cell in line.strip("|").split("|"))
        for key in re.findall(r"`([^`]+)`", first):
            found[key] = others
    return found


def plain(text: str) -> str:
    """One line of text, whatever its breaks."""
    return " ".join(text.split())


MODEL_SECTIONS = {
    "unit": "## `[unit]`",
    "input": "## `[[input]]`",
    "sensor": "## `[[sensor]]`",
    "estimate": "## `[[estimate]]`",
    "disturbance": "## `[[disturbance]]`",
    "transfer_function": "## `[[transfer_function]]`",
    "fault_tests": "## `[fault_tests]`",
}
(FULL_EXAMPLE,) = blocks("toml", REFERENCE)
SITE_EXAMPLE = next(block for block in blocks("toml", FIRST_HOUR) if "[database]" in block)
MODEL_EXAMPLE = next(block for block in blocks("toml", FIRST_HOUR) if "[database]" not in block)


def measured_tags(spec: UnitSpec) -> list[str]:
    """Tags that a history must have."""
    return [item.tag for item in spec.inputs] + [item.tag for item in spec.sensors]


def known_to_the_parser(lines: tuple[str, ...], key: str) -> set[str]:
    """The keys that a parser names when it meets one that it does not know."""
    (line,) = [line for line in lines if f" {key}: unknown" in line]
    listed = line.split("expected one of ")[1].split(";")[0]
    return set(listed.split(", "))


def refusal_of_model(text: str) -> tuple[str, ...]:
    with pytest.raises(ModelFileError) as raised:
        parse_model_text(text, "m.toml")
    return raised.value.lines


def refusal_of_site(text: str, folder: Path) -> tuple[str, ...]:
    file = folder / "site.toml"
    file.write_text(text, encoding="utf-8")
    with pytest.raises(SiteFileError) as raised:
        read_site_file(file, ENVIRONMENT)
    return raised.value.lines


def with_line_in(text: str, heading: str, line: str) -> str:
    return text.replace(heading, f"{heading}\n{line}", 1)


def test_chapters_have_numbers_of_their_own_and_name_each_other_rightly() -> None:
    numbers = [int(name[:2]) for name in CHAPTERS]
    assert numbers == sorted(set(numbers))
    assert {1, 2, 3, 4, 5, 6, 8} <= set(numbers)
    for name, text in CHAPTERS.items():
        assert text.startswith(f"# {int(name[:2])}. ")
        for target in re.findall(r"\]\(([^)#]+)\)", text):
            assert target in CHAPTERS or resources.files("softsensor.handbook").joinpath(target).is_file()
        for anchor in re.findall(r"\]\(#([^)]+)\)", text):
            assert f"\n## {anchor.capitalize()}\n" in text


def test_the_readme_leads_to_every_chapter_and_has_the_two_commands() -> None:
    for name in CHAPTERS:
        assert f"(softsensor/handbook/{name})" in README
    assert "\n    pip install . && softsensor demo\n" in README
    assert "\n    pip install '.[test]' && pytest\n" in README


@pytest.mark.parametrize("text", all_blocks("toml"))
def test_every_toml_block_is_a_sound_file(text: str, tmp_path: Path) -> None:
    found = tomllib.loads(text)
    if "database" in found or "state" in found.get("unit", {}):
        whole = text if "database" in found else f"{SITE_EXAMPLE}\n{text}"
        (tmp_path / "site.toml").write_text(whole, encoding="utf-8")
        assert read_site_file(tmp_path / "site.toml", ENVIRONMENT).units
    else:
        assert parse_model_text(text, "m.toml").paths


@pytest.mark.parametrize("text", all_blocks("csv"))
def test_every_csv_block_is_a_sound_file_of_the_first_hours_unit(text: str, tmp_path: Path) -> None:
    spec = parse_model_text(MODEL_EXAMPLE, "m.toml")
    file = tmp_path / "file.csv"
    file.write_text(text, encoding="utf-8")
    if text.startswith("time,arrived_at,"):
        rows = read_late(file, measured_tags(spec))
        assert (len(rows), rows.ignored_tags) == (text.count("\n") - 1, ())
    elif text.startswith("time,"):
        tags = measured_tags(spec)
        history = read_history(file, tags)
        assert (set(history.series), history.ignored_columns) == (set(tags), ())
    else:
        results = read_lab(file, [item.lab.tag for item in spec.estimates if item.lab is not None])
        assert len(results) == text.count("\n") - 1
        assert (results.ignored_tags, results.ignored_columns) == ((), ())


def test_the_first_hours_model_is_a_soft_sensor(tmp_path: Path) -> None:
    (tmp_path / "r210.toml").write_text(MODEL_EXAMPLE, encoding="utf-8")

    assert model_report(unit_design.load_model(tmp_path / "r210.toml")).sound


def test_the_first_hours_site_serves_the_first_hours_model(tmp_path: Path) -> None:
    (tmp_path / "site.toml").write_text(SITE_EXAMPLE, encoding="utf-8")
    spec = parse_model_text(MODEL_EXAMPLE, "m.toml")
    (unit,) = read_site_file(tmp_path / "site.toml", ENVIRONMENT).units
    labs = [item.lab.tag for item in spec.estimates if item.lab is not None]

    assert unit.model == tmp_path / "r210.toml"
    assert set(unit.nodes) == {*measured_tags(spec), *labs}


def test_every_section_of_a_model_file_is_described() -> None:
    known = known_to_the_parser(refusal_of_model(f"nonsense = 1\n{FULL_EXAMPLE}"), "nonsense")

    assert known == set(MODEL_SECTIONS)


@pytest.mark.parametrize("name", MODEL_SECTIONS)
def test_every_key_of_a_model_file_is_described_and_no_other(name: str) -> None:
    heading = MODEL_SECTIONS[name].split("`")[1]
    known = known_to_the_parser(
        refusal_of_model(with_line_in(FULL_EXAMPLE, heading, "nonsense = 1")), "nonsense"
    )
    described = {key for key in table_rows(section(REFERENCE, MODEL_SECTIONS[name])) if "." not in key}

    assert described == known


def test_every_key_of_the_laboratory_table_is_described() -> None:
    lines = refusal_of_model(FULL_EXAMPLE.replace("sd = 0.02 }", "sd = 0.02, nonsense = 1 }"))
    described = table_rows(section(REFERENCE, MODEL_SECTIONS["estimate"]))

    assert {f"lab.{key}" for key in known_to_the_parser(lines, "lab.nonsense")} == {
        key for key in described if key.startswith("lab.")
    }


@pytest.mark.parametrize("name", MODEL_SECTIONS)
def test_the_example_with_every_key_has_every_key(name: str) -> None:
    found = tomllib.loads(FULL_EXAMPLE)[name]
    used = {key for table in (found if isinstance(found, list) else [found]) for key in table}
    described = {key for key in table_rows(section(REFERENCE, MODEL_SECTIONS[name])) if "." not in key}

    assert used == described


def first_table(name: str) -> str:
    """The example's first table of a section, as text."""
    heading = MODEL_SECTIONS[name].split("`")[1]
    begin = FULL_EXAMPLE.index(f"{heading}\n")
    return re.split(r"^$", FULL_EXAMPLE[begin:], maxsplit=1, flags=re.MULTILINE)[0]


NEEDED_OR_NOT = [
    pytest.param(name, key, cells[0], id=f"{name} {key}")
    for name in ("unit", "input", "sensor", "estimate", "fault_tests")
    for key, cells in table_rows(section(REFERENCE, MODEL_SECTIONS[name])).items()
    if "." not in key
]


@pytest.mark.parametrize(("name", "key", "needed"), NEEDED_OR_NOT)
def test_a_key_is_needed_where_the_table_says_so(name: str, key: str, needed: str) -> None:
    whole = first_table(name)
    without = re.sub(rf"^{key} = .*\n", "", whole, flags=re.MULTILINE)
    assert without != whole
    text = FULL_EXAMPLE.replace(whole, without, 1)
    assert needed in ("yes", "no")
    if needed == "no":
        assert parse_model_text(text, "m.toml").name == "R-210"
    else:
        assert any(f": {key}: missing" in line for line in refusal_of_model(text))


DEFAULTS = {
    ("sensor", "on_change"): False,
    ("sensor", "gate"): GATE,
    ("sensor", "bias_walk_sd"): 0.0,
    ("sensor", "bias_initial_sd"): 0.0,
    ("sensor", "max_age"): None,
    ("sensor", "validated_range"): None,
    ("input", "validated_range"): None,
    ("input", "max_age"): None,
    ("estimate", "bias_walk_sd"): 0.0,
    ("estimate", "bias_initial_sd"): 0.0,
    ("estimate", "interval_scale"): 1.0,
    ("estimate", "lab"): None,
    ("estimate", "validated_range"): None,
    ("input", "transform"): None,
    ("sensor", "transform"): None,
    ("estimate", "transform"): None,
    ("estimate", "limits"): None,
}
WORDS = {"False": "false", "0.0": "0", "1.0": "1", "8.0": "8", "None": "none"}


@pytest.mark.parametrize(("name", "key"), DEFAULTS)
def test_the_default_is_the_one_in_the_table(name: str, key: str) -> None:
    whole = first_table(name)
    text = FULL_EXAMPLE.replace(whole, re.sub(rf"^{key} = .*\n", "", whole, flags=re.MULTILINE), 1)
    spec = parse_model_text(text, "m.toml")
    first = {"input": spec.inputs, "sensor": spec.sensors, "estimate": spec.estimates}[name][0]
    said = table_rows(section(REFERENCE, MODEL_SECTIONS[name]))[key][1]

    assert getattr(first, key) == DEFAULTS[name, key]
    assert said.startswith("three sample times" if key == "max_age" else WORDS[str(DEFAULTS[name, key])])


def test_the_other_defaults_are_the_ones_in_the_tables() -> None:
    spec = parse_model_text(FULL_EXAMPLE.split("[fault_tests]")[0], "m.toml")
    tests = table_rows(section(REFERENCE, MODEL_SECTIONS["fault_tests"]))
    sensors = table_rows(section(REFERENCE, MODEL_SECTIONS["sensor"]))

    assert parse_duration(tests["false_flag_interval"][1]) == spec.false_flag_interval == FALSE_FLAG_INTERVAL
    assert (tests["leave_out_isolated"][1], spec.leave_out_isolated) == ("false", False)
    assert sensors["tolerance"][1] == "four times `noise_sd`"
    assert spec.sensors[1].tolerance == 4.0 * spec.sensors[1].noise_sd


LIMITS = [
    (REFERENCE, f"at most {model_checks.MOST_PAST_INPUTS} sample times"),
    (REFERENCE, f"where a disturbance enters, at most {model_checks.MOST_PAST_DISTURBANCES}"),
    (REFERENCE, f"needs at most {stochastic.LARGEST} states"),
    (REFERENCE, f"a list of times above zero, at most {model_paths.HIGHEST_DEGREE}"),
    (REFERENCE, f"degree at most {model_paths.HIGHEST_DEGREE}"),
    (REFERENCE, f"more than {cycle.BEYOND_BELOW:.1%} of the span below it".replace("%", " %")),
    (REFERENCE, f"or {cycle.BEYOND_ABOVE:.2%} above it is none".replace("%", " %")),
    (FILES, f"more than {cycle.BEYOND_BELOW:.1%} of the span below the range".replace("%", " %")),
    (FILES, f"or {cycle.BEYOND_ABOVE:.2%} above it".replace("%", " %")),
    (FILES, f"waits up to {live.GRACE:g} s for tags"),
    (FILES, f"more than {lab_results.IMPOSSIBLE:g} standard deviations from its prediction is not used"),
    (METHOD, f"More than {lab_results.IMPOSSIBLE:g} standard deviations from its prediction it is not used"),
    (METHOD, f"(within {lab_results.FITS:g} standard deviations)"),
    (METHOD, f"at another time within {lab_results.SEARCH_HOURS:g} h"),
    (METHOD, f"may be {assembly.DEFAULT_HORIZON_S / 86400.0:g} days late at least"),
    (METHOD, f"{layout.UNCERTAIN_VARIANCE:g} noise_sd^2 where the reading is Uncertain"),
    (METHOD, f"the interval of {published.NORMAL_95:.2f} sd to either side"),
    (METHOD, f"is beyond `gate` standard deviations ({GATE:g},"),
    (METHOD, f"In the {gate.FOLLOWED} cycles after a sensor began to be followed"),
    (METHOD, f"clipped to {design_of_tests.CLIP:g} in size"),
    (METHOD, f"in the end, at most {design_of_tests.LARGEST_REFERENCE:g}."),
    (METHOD, f"Where that half is below {design_of_tests.LEAST_REFERENCE:g} the filter absorbs"),
    (METHOD, f"k is then {design_of_tests.GROSS_REFERENCE:g},"),
    (METHOD, f"The fast pair has k = {design_of_tests.FAST_REFERENCE:g},"),
    (METHOD, f"a noise {design_of_tests.SPREAD_RATIO:g} times as large"),
    (METHOD, f"a noise {design_of_tests.JOINT_RATIO:g} times as"),
    (METHOD, f"stayed down for more than {single_faults.QUIET} cycles"),
    (METHOD, f"within {absorbed_faults.LONGEST_QUIET / absorbed_faults.ALLOWANCE:.0f} cycles on average"),
    (
        METHOD,
        f"more than {design_of_tests.LOST_SECONDS:g} s and more than {design_of_tests.LOST_CYCLES} cycles",
    ),
    (METHOD, f"a move of {beginning.MOVE:.0%} of each input's".replace("%", " %")),
    (METHOD, f"any more, at most {beginning.LONGEST_S / 3600.0:g} h."),
    (METHOD, f"at least {reading_tests.MIN_REPEATS} equal readings in a row"),
    (METHOD, f"once {reading_tests.WARM_UP} readings have been seen"),
    (METHOD, f"beyond {design_of_tests.SPIKE:g} standard deviations"),
    (METHOD, f"within the last {unit_design.WINDOW} cycles"),
    (METHOD, f"after {outcomes.PATIENCE} cycles"),
    (TUNING, f"Fits on the first {tuning.FIT_SHARE:.0%} of the history".replace("%", " %")),
    (TUNING, f"at least {tuning.LEAST_CYCLES} cycles in either part"),
    (TUNING, f"(a ratio below {archive_checks.FLAT:g}, beyond chance)"),
    (
        TUNING,
        f"wider than a factor of {separability.interval(1.0, separability.LARGEST_SD)[1]:.1f} either way",
    ),
    (TUNING, f"correlated beyond {separability.LARGEST_CORRELATION:g}"),
    (
        TUNING,
        f"With {interval_scale.LEAST_RESULTS} results or more that contradict the promise, or with "
        f"{interval_scale.SURE_RESULTS} in any case",
    ),
    (SHEET, f"a few times more until {outcomes.PATIENCE} cycles later"),
    (SHEET, f"The noise is drawn {isolability.DRAWS} times"),
    (SHEET, f"named alone in fewer than {sheet.NAMED:.0%} of cases".replace("%", " %")),
    (SHEET, f"one result every {format_duration(what_helps.LAB_INTERVAL).replace('1 d', '24 h')}"),
    (AFTER, f"such as 90 min or 2 d, at most {changes.LONGEST_S / 86400.0:g} days"),
    (AFTER, f"for how long (at most {changes.LONGEST_S / 86400.0:g} days)"),
    (AFTER, f"say what the plant does ({', '.join(changes.OCCASIONS)})"),
    (AFTER, f"looks for decisions every {live.DECISIONS_EVERY:g} s"),
    (AFTER, f"{flag_sheet.NEAR:.0%} of the range below and above it".replace("%", " %")),
    (AFTER, f"*{'*, *'.join(tables.FINDINGS[:3])}* or *{tables.FINDINGS[3]}*"),
]


@pytest.mark.parametrize(("chapter", "words"), LIMITS, ids=[words for _, words in LIMITS])
def test_a_number_of_the_program_is_the_one_in_the_handbook(chapter: str, words: str) -> None:
    assert words in plain(chapter)


def test_the_ratio_at_which_a_name_is_given_is_ten_to_one() -> None:
    assert diagnosis.NAMING_RATIO == 10.0
    assert "ten times as probable as everything else together" in plain(METHOD)


def test_the_longest_time_and_the_longest_name_are_as_described() -> None:
    assert format_duration(model_kinds.LONGEST) == "365250 d"
    assert "No time is longer than a thousand years" in plain(REFERENCE)
    longest = re.search(r"at most (\d+) printable characters", plain(REFERENCE))
    assert longest is not None
    name = "n" * int(longest[1])
    text = FULL_EXAMPLE.replace("feed concentration", name)
    assert parse_model_text(text, "m.toml").disturbances[0].name == name
    assert refusal_of_model(text.replace(name, f"{name}n"))


def test_every_unit_of_time_is_listed() -> None:
    times = next(part for part in REFERENCE.split("\n\n") if part.startswith("**Times**"))

    assert set(SECONDS) <= set(re.findall(r"`(\w+)`", times))


def test_the_lists_of_units_are_those_of_the_program() -> None:
    prefixed, whole = blocks("text", section(REFERENCE, "## Units"))

    assert set(whole.split()) == set(WHOLE)
    assert set(prefixed.split()) == {f"{symbol}({prefixes})" for symbol, (prefixes, _) in PREFIXED.items()}


SITE_SECTIONS = {
    "database": "[database]",
    "plant": "[plant]",
    "publish": "[publish]",
    "web": "[web]",
    "unit": "[[unit]]",
    "clock": "[clock]",
}
WHOLE_SITE = f"{SITE_EXAMPLE}\n[clock]\nspeed = 1.0\n"


@pytest.mark.parametrize("name", SITE_SECTIONS)
def test_every_key_of_a_site_file_is_described_and_no_other(name: str, tmp_path: Path) -> None:
    text = with_line_in(WHOLE_SITE, SITE_SECTIONS[name], "nonsense = 1")
    known = known_to_the_parser(refusal_of_site(text, tmp_path), "nonsense")
    described = table_rows(section(FILES, "## The site file"))

    assert {f"{name}.{key}" for key in known} == {key for key in described if key.startswith(f"{name}.")}


def test_every_section_of_a_site_file_is_described(tmp_path: Path) -> None:
    known = known_to_the_parser(refusal_of_site(f"nonsense = 1\n{WHOLE_SITE}", tmp_path), "nonsense")
    described = table_rows(section(FILES, "## The site file"))

    assert {key.split(".")[0] for key in described} == known == set(SITE_SECTIONS)


@pytest.mark.parametrize(
    ("heading", "columns"),
    [
        ("### estimates", result_tables.ESTIMATE_COLUMNS),
        ("### innovations", result_tables.INNOVATION_COLUMNS),
        ("### flags", result_tables.FLAG_COLUMNS),
        ("### lab_results", result_tables.LAB_COLUMNS),
    ],
)
def test_the_columns_of_the_result_files_are_described(heading: str, columns: tuple[str, ...]) -> None:
    assert set(table_rows(section(FILES, heading))) == set(columns)


def commands() -> list[object]:
    """Every command line in the README and in the handbook's shell blocks."""
    lines = [
        line for text in CHAPTERS.values() for block in blocks("sh", text) for line in block.splitlines()
    ]
    lines += [line.strip() for line in README.splitlines() if line.startswith("    softsensor ")]
    return [pytest.param(line, id=line) for line in dict.fromkeys(lines)]


@pytest.mark.parametrize("line", commands())
def test_every_command_is_one_that_the_program_understands(
    line: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    from softsensor.cli.main import app

    program, *words = shlex.split(line)
    assert program == "softsensor"
    found: Any = get_command(app)
    while hasattr(found, "commands"):
        assert words[0] in found.commands
        found, words = found.commands[words[0]], words[1:]
    assert found.make_context(program, words).params


def as_printed(tables: tuple[ReportTable, ...]) -> str:
    """As the command prints them where there is no terminal."""
    out = io.StringIO()
    for table in tables:
        print_table(Console(file=out, highlight=False, width=120), table)
    return out.getvalue()


def same_word(there: str, here: str) -> bool:
    """Words are equal; figures to 5 %, whole numbers (shares in percent) to one."""
    try:
        shown, found = (float(word.strip("(),;%")) for word in (there, here))
    except ValueError:
        return there == here
    return abs(shown - found) <= max(0.05 * abs(found), float(found >= 1.0 and shown == int(shown)))


def test_the_sheet_in_the_handbook_is_what_the_command_prints() -> None:
    """If it is not any more: run the command that stands above it and paste. Shares of drawn cases are not compared."""
    report = model_report(unit_design.load_model(reactor_model_path()))
    tables = (knowledge_tables(report)[-1], *sheet_tables(report))
    (shown,) = blocks("text", SHEET)
    rule = "\u2500"
    ends = [shown.index(table.title) for table in tables[1:]] + [len(shown)]
    for table, begin, end in zip(tables, [0, *ends[:-1]], ends, strict=True):
        texts = (shown[begin:end].split(), as_printed((table,)).split())
        there, here = ([word for word in text if rule not in word] for text in texts)
        if table.title in ("What a fault is taken for", "Which instrument would mend it"):
            count = len(" ".join((table.title, *table.columns)).split())
            there, here = there[:count], here[:count]
        assert [pair for pair in zip(there, here, strict=True) if not same_word(*pair)] == []


def test_the_keys_of_the_sheet_in_json_are_described() -> None:
    document = as_document(model_report(unit_design.load_model(reactor_model_path())))
    described = set(table_rows(section(SHEET, "## The JSON document")))
    line, told = document["sensors"][0], document["sensors"][0]["told"][0]
    assert {"horizons", "inputs[]", "mends[]", "prospects[]", "sensors[].told[]"} <= described
    wanted = {f"sensors[].{key}" for key in line if key not in ("shift", "found", "told")}
    wanted |= {f"sensors[].found.{key}" for key in line["found"]}
    assert wanted <= described
    text = section(SHEET, "## The JSON document")
    for item in (
        told,
        document["mends"][0],
        document["prospects"][0],
        document["prospects"][0]["changes"][0],
    ):
        assert all(f"`{key}`" in text for key in item if key not in ("tag", "unit"))


def test_what_the_review_can_look_back_on_is_the_code_s() -> None:
    assert f"one in {storing.LASTING} cycles" in AFTER
    assert f"one in {storing.LASTING} cycles" in CHAPTERS["06-records.md"]
    assert AFTER.count(f"{smoothed_window.LONGEST:,} cycles") == 2
    assert ", ".join(list(review_period.PERIODS)[:-1]) + " or 7 d" in AFTER
