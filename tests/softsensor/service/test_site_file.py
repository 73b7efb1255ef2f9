"""The site file: settings out, every fault with its line and key at once, and no secret in any text."""

from __future__ import annotations

from pathlib import Path

import pytest
from independent.small_unit import MODEL

from plant_models.model_file import parse_model_text
from softsensor.errors import SiteFileError
from softsensor.service.plant_state import StateRule
from softsensor.service.site_file import SiteSettings, read_site_file
from softsensor.service.state_tables import fitted_states

SITE = """# A site
[database]
url = "postgresql+psycopg://me:${DB_PASSWORD}@db/records"

[plant]
endpoint = "opc.tcp://${HOST}:4840"
security_policy = "Basic256Sha256"
user = "softsensor"
password = "${PLANT_PASSWORD}"
pki = "pki"

[publish]
endpoint = "opc.tcp://127.0.0.1:4850"

[web]
address = "[::1]:8080"

[[unit]]
model = "r1.toml"
nodes = { FI1 = "nsu=urn:example:${HOST};s=R1.FI1", TI1 = "nsu=urn:example:plant;s=R1.TI1" }

[[unit]]
model = "sub/r2.toml"
nodes = { FI2 = "nsu=urn:example:plant;s=R2.FI2" }
"""
ENVIRONMENT = {"HOST": "plant-server", "PLANT_PASSWORD": " hunter2 ", "DB_PASSWORD": "swordfish"}
LEAST = """[database]
url = "sqlite:///records.db"
[plant]
endpoint = "opc.tcp://127.0.0.1:4840"
[[unit]]
model = "r1.toml"
nodes = { FI1 = "nsu=urn:example:plant;s=R1.FI1" }
"""


def read(folder: Path, text: str, environment: dict[str, str] | None = None) -> SiteSettings:
    path = folder / "site.toml"
    path.write_text(text, encoding="utf-8")
    return read_site_file(path, ENVIRONMENT if environment is None else environment)


def faults(folder: Path, text: str, environment: dict[str, str] | None = None) -> list[str]:
    with pytest.raises(SiteFileError) as refused:
        read(folder, text, environment)
    lines = list(refused.value.lines)
    assert all(line.startswith(f"{folder / 'site.toml'}:") for line in lines)
    return [line.removeprefix(f"{folder / 'site.toml'}:") for line in lines]


def test_a_whole_site(tmp_path: Path) -> None:
    site = read(tmp_path, SITE)
    assert site.database == "postgresql+psycopg://me:swordfish@db/records"
    assert (site.plant.endpoint, site.plant.user) == ("opc.tcp://plant-server:4840", "softsensor")
    assert site.plant.password == " hunter2 "  # spaces belong to a password
    assert site.plant.pki == tmp_path / "pki"
    assert (site.publish, site.web, site.clock) == ("opc.tcp://127.0.0.1:4850", ("::1", 8080), None)
    assert [unit.model for unit in site.units] == [tmp_path / "r1.toml", tmp_path / "sub" / "r2.toml"]
    assert site.units[0].nodes["FI1"] == "nsu=urn:example:plant-server;s=R1.FI1"


def test_the_least_site(tmp_path: Path) -> None:
    site = read(tmp_path, LEAST, {})
    assert (site.plant.security_policy, site.plant.password, site.plant.allow_unencrypted) == (
        "Basic256Sha256",
        None,
        False,
    )
    assert (site.publish, site.web) == (None, None)


def test_no_secret_in_any_text(tmp_path: Path) -> None:
    site = read(tmp_path, SITE)
    for text in (repr(site), str(site), repr(site.plant), f"{site}"):
        assert "hunter2" not in text
        assert "swordfish" not in text


@pytest.mark.parametrize(
    ("good", "bad"),
    [
        ('password = "${PLANT_PASSWORD}"', 'password = ["hunter2"]'),
        ('password = "${PLANT_PASSWORD}"', "password = 77123456"),
        ('password = "${PLANT_PASSWORD}"', 'password = { a = "hunter2" }'),
        ('password = "${PLANT_PASSWORD}"', 'password = "hunter2'),
        (
            'url = "postgresql+psycopg://me:${DB_PASSWORD}@db/records"',
            'url = ["postgresql://me:swordfish@db/r"]',
        ),
    ],
)
def test_a_secret_in_the_wrong_form_is_a_fault_that_does_not_show_it(
    tmp_path: Path, good: str, bad: str
) -> None:
    found = faults(tmp_path, SITE.replace(good, bad))
    assert found
    for secret in ("hunter2", "77123456", "swordfish"):
        assert all(secret not in line for line in found)


def test_a_name_that_the_environment_does_not_have_is_a_fault_where_it_stands(tmp_path: Path) -> None:
    assert faults(tmp_path, SITE, {"HOST": "plant-server"}) == [
        "3: url: expected DB_PASSWORD in the environment; it is not set",
        "9: password: expected PLANT_PASSWORD in the environment; it is not set",
    ]


FAULTS = [
    ('url = "sqlite:///records.db"', "url = 3", "2: url: expected a database's address"),
    ('url = "sqlite:///records.db"', "", "1: url: missing; expected a database's address"),
    ('[database]\nurl = "sqlite:///records.db"\n', "", "1: database: missing; expected [database]"),
    ("[database]", "[[database]]", "1: database: expected one table [database]"),
    ("[plant]", "[plants]", "3: plants: unknown section"),
    ('endpoint = "opc.tcp://127.0.0.1:4840"', "endpoint = true", "4: endpoint: expected an address"),
    ('endpoint = "opc.tcp://127.0.0.1:4840"', "", "3: endpoint: missing"),
    (
        "[[unit]]",
        'security_policy = "Basic128"\n[[unit]]',
        '5: security_policy: expected "Basic256Sha256" or "None"',
    ),
    ("[[unit]]", 'allow_unencrypted = "yes"\n[[unit]]', "5: allow_unencrypted: expected true or false"),
    (
        "[[unit]]",
        "publishing_interval = -1\n[[unit]]",
        "5: publishing_interval: expected a number above zero",
    ),
    (
        "[[unit]]",
        "publishing_interval = nan\n[[unit]]",
        "5: publishing_interval: expected a number above zero",
    ),
    ("[[unit]]", 'pasword = "x"\n[[unit]]', "5: pasword: unknown key"),
    ("[[unit]]", '[web]\naddress = "8080"\n[[unit]]', "6: address: expected host and port"),
    ("[[unit]]", '[web]\naddress = "host:99999"\n[[unit]]', "6: address: expected host and port"),
    ("[[unit]]", "[web]\n[[unit]]", "5: address: missing; expected host and port"),
    ("[[unit]]", "[publish]\nendpoint = 1\n[[unit]]", "6: endpoint: expected an address"),
    ("[[unit]]", "[clock]\nspeed = 0\n[[unit]]", "6: speed: expected a number above zero"),
    ("[[unit]]", "[unit]", "5: unit: expected [[unit]] in double brackets"),
    ('model = "r1.toml"', "model = []", "6: model: expected a text"),
    (
        'nodes = { FI1 = "nsu=urn:example:plant;s=R1.FI1" }',
        "nodes = {}",
        "7: nodes: expected node ids by tag",
    ),
    (
        'nodes = { FI1 = "nsu=urn:example:plant;s=R1.FI1" }',
        "nodes = { FI1 = 3 }",
        "7: nodes: expected node ids by tag",
    ),
    ('nodes = { FI1 = "nsu=urn:example:plant;s=R1.FI1" }', "", "5: nodes: missing"),
]


@pytest.mark.parametrize(("good", "bad", "expected"), FAULTS, ids=[item[2] for item in FAULTS])
def test_each_fault_has_its_line_and_key(tmp_path: Path, good: str, bad: str, expected: str) -> None:
    assert LEAST.count(good) == 1
    found = faults(tmp_path, LEAST.replace(good, bad), {})
    assert any(line.startswith(expected) for line in found), found


def test_all_faults_at_once_in_the_order_of_their_lines(tmp_path: Path) -> None:
    text = (
        LEAST.replace('"sqlite:///records.db"', "3")
        .replace('"opc.tcp://127.0.0.1:4840"', "4")
        .replace("{ FI1", "{ FI1 = 5, FI2")
    )
    found = faults(tmp_path, text, {})
    assert [line.split(":")[:2] for line in found] == [["2", " url"], ["4", " endpoint"], ["7", " nodes"]]


@pytest.mark.parametrize(
    ("content", "expected"),
    [
        (b"[plant\n", "1: expected TOML"),
        (b"\xff\xfe", "1: expected a readable site file"),
        (b"a = 1\na = 2\n", "2: expected TOML"),
    ],
)
def test_what_is_no_site_file(tmp_path: Path, content: bytes, expected: str) -> None:
    path = tmp_path / "site.toml"
    path.write_bytes(content)
    with pytest.raises(SiteFileError) as refused:
        read_site_file(path, {})
    assert refused.value.lines[0].startswith(f"{path}:{expected}")
    with pytest.raises(SiteFileError, match="expected a readable site file"):
        read_site_file(tmp_path / "none.toml", {})
    with pytest.raises(SiteFileError, match="expected a readable site file"):
        read_site_file(tmp_path, {})


def test_no_units(tmp_path: Path) -> None:
    assert faults(tmp_path, LEAST.partition("[[unit]]")[0], {}) == [
        "1: unit: missing; expected at least one [[unit]]"
    ]


STATE = """
[[unit.state]]
name = "off"
tag = "FI1"
below = 2.0
for = "1 min"
settle = "30 min"

[[unit.state]]
name = "TI1 is calibrated"
tag = "HS1"
equals = 1
sensor = "TI1"
"""


def test_states_of_the_plant(tmp_path: Path) -> None:
    (unit,) = read(tmp_path, LEAST + STATE, {}).units
    assert unit.states == (
        StateRule("off", "FI1", below=2.0, lasting=60_000_000, settle=1_800_000_000),
        StateRule("TI1 is calibrated", "HS1", equals=1.0, sensor="TI1"),
    )


@pytest.mark.parametrize(
    ("before", "after", "fault"),
    [
        ("below = 2.0\n", "", "9: below: expected below, above or both, or equals alone"),
        (
            "below = 2.0",
            "below = 2.0\nequals = 0",
            "12: below: expected below, above or both, or equals alone",
        ),
        ("below = 2.0", "below = 2.0\nabove = 2", "12: below: expected another value than that of above"),
        ("below = 2.0", "below = '2'", "12: below: expected a finite number; got '2', which is no number"),
        ('"1 min"', "60", "13: for: expected a time"),
        ("below", "beneath", "12: beneath: unknown key, expected one of name, tag, below"),
        ('tag = "FI1"\n', "", "9: tag: missing; expected a tag such as 'TI2101A'"),
        ('"HS1"\nequals = 1', '"FI1"\nbelow = 2', "17: name: "),
    ],
)
def test_a_bad_state(tmp_path: Path, before: str, after: str, fault: str) -> None:
    text = STATE.replace("TI1 is calibrated", "off").replace('sensor = "TI1"\n', "").replace(before, after)
    assert any(line.startswith(fault) for line in faults(tmp_path, LEAST + text, {}))


def test_a_state_asks_for_a_tag_that_has_a_node_and_a_sensor_that_the_model_has(tmp_path: Path) -> None:
    spec = parse_model_text(MODEL, "r1.toml")
    rules = (StateRule("off", "XS9", equals=0.0), StateRule("work", "FI1", below=1.0, sensor="TI9"))
    with pytest.raises(SiteFileError) as refused:
        fitted_states(rules, spec, ("FI1", "TI1"), "site.toml")
    assert list(refused.value.lines) == [
        "site.toml: state off: tag XS9 has no readings; expected one that has",
        f"site.toml: state work: TI9 is no sensor of {spec.name}",
    ]
    (fitted,) = fitted_states((StateRule("off", "FI1", below=2.0),), spec, ("FI1", "TI1"), "site.toml")
    assert fitted.condition == "FI1 below 2 m3/h"
