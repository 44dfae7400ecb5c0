"""The configurations that are shipped, and how mistakes in one are told."""

from __future__ import annotations

import copy
import re
from collections.abc import Iterator
from pathlib import Path
from types import UnionType
from typing import Any, Union, get_args, get_origin

import pytest
import tomli
from hypothesis import HealthCheck, example, given, settings
from hypothesis import strategies as st
from pydantic import BaseModel, ValidationError

from acquire.config import ConfigError, Rig, load, parse
from acquire.config.loading import validate
from acquire.config.table import TableSection
from acquire.laboratory.bench import Bench
from acquire.laboratory.scenario import Scenario
from acquire.reply import parse_replies, read_setting

CONFIGS = Path(__file__).parents[1] / "configs"
SHIPPED = sorted(path.name for path in CONFIGS.iterdir())
DEMO = (CONFIGS / "demo.toml").read_bytes()
RAW = tomli.loads(DEMO.decode())

HEADER = re.compile(r"^(# )?\[{1,2}([a-z_.]+)\]{1,2}")
ASSIGNMENT = re.compile(r"^# ([A-Za-z_]+ = .*)$")


def problems_of(raw: dict[str, Any]) -> dict[str, str]:
    """Every mistake by its path."""
    with pytest.raises(ConfigError) as caught:
        validate(raw)
    return {problem.path: str(problem) for problem in caught.value.problems}


def changed(*path: str | int, to: Any) -> dict[str, Any]:
    """The demo's configuration with one value replaced or added."""
    raw = copy.deepcopy(RAW)
    node: Any = raw
    for part in path[:-1]:
        node = node[part]
    node[path[-1]] = to
    return raw


def without(section: str) -> dict[str, Any]:
    """The demo's configuration without one of its sections."""
    return {key: value for key, value in RAW.items() if key != section}


def model_in(annotation: Any) -> type[BaseModel] | None:
    """The section that a type holds, through optional values, tuples and annotations."""
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return annotation
    if get_origin(annotation) in (tuple, Union, UnionType):
        return next(filter(None, map(model_in, get_args(annotation))), None)
    return None


def models_under(model: type[BaseModel]) -> Iterator[type[BaseModel]]:
    """A section and all those in it, without [table] and [laboratory]."""
    yield model
    for field in model.model_fields.values():
        inner = model_in(field.annotation)
        if inner not in (None, TableSection, Scenario):
            yield from models_under(inner)


def commented_out(name: str) -> Iterator[tuple[str, str, str]]:
    """(section, key, line) of every key that a file shows behind a #."""
    section = behind = ""
    for line in (CONFIGS / name).read_text(encoding="utf-8").splitlines():
        if header := HEADER.match(line):
            section, behind = (section, header[2]) if header[1] else (header[2], "")
        elif not line:
            behind = ""
        elif found := ASSIGNMENT.match(line):
            yield behind or section, found[1].partition(" ")[0], found[1]


def section_model(section: str) -> type[BaseModel]:
    """The model of a section by its dotted name."""
    model: type[BaseModel] | None = Rig
    for part in section.split("."):
        assert model is not None
        model = model_in(model.model_fields[part].annotation)
    assert model is not None
    return model


@pytest.mark.parametrize("name", SHIPPED)
def test_every_shipped_file_loads(name: str) -> None:
    rig, data = load(CONFIGS / name)
    assert isinstance(rig, Rig)
    assert data == (CONFIGS / name).read_bytes()
    with pytest.raises(ValidationError):
        rig.run.title = "frozen"


@pytest.mark.parametrize("name", SHIPPED)
def test_every_key_that_a_file_shows_behind_a_sign_exists_and_takes_the_value_shown(
    name: str,
) -> None:
    for section, key, line in commented_out(name):
        model = section_model(section)
        assert key in model.model_fields, (section, line)
        try:
            model.model_validate(tomli.loads(line))
        except ValidationError as error:
            wrong = [item for item in error.errors() if item["loc"][:1] == (key,)]
            assert not wrong, (section, line, wrong)


def test_the_template_shows_every_key_that_there_is() -> None:
    text = (CONFIGS / "lockins-and-magnet.toml").read_text(encoding="utf-8")
    shown = set(re.findall(r"(?:^|[{,] ?|^# )([A-Za-z_]+) = ", text, re.MULTILINE))
    for header in re.findall(r"^(?:# )?\[{1,2}([a-z_.]+)\]{1,2}", text, re.MULTILINE):
        shown |= set(header.split("."))
    for model in models_under(Rig):
        missing = set(model.model_fields) - shown - {"table", "laboratory"}
        assert not missing, (model.__name__, missing)


def test_the_demo_and_its_laboratory_describe_the_same_rig() -> None:
    rig = parse(DEMO)
    scenario, ramp, bar = rig.laboratory, rig.ramp, rig.hall_bars[0]
    assert scenario is not None and ramp is not None and bar.excitation is not None
    assert ramp.path_T == scenario.magnet.path_T
    assert ramp.rate_T_per_min == scenario.magnet.rate_T_per_min
    assert ramp.duration_s == pytest.approx(100.0)
    assert bar.excitation.current_A == scenario.current_A
    assert bar.number_of_squares == scenario.sample.squares
    assert bar.expected_carriers == scenario.sample.carriers
    ports = {section.name: section.port for section in scenario.lockins}
    ports["magnet"] = scenario.magnet.port
    assert ports == {"lockin_xx": 47101, "lockin_xy": 47102, "magnet": 47103}
    for reader in rig.readers:
        assert reader.resource == f"TCPIP::127.0.0.1::{ports[reader.name]}::SOCKET"


def test_the_demo_is_answered_as_it_is_configured() -> None:
    rig = parse(DEMO)
    assert rig.laboratory is not None
    bench = Bench(rig.laboratory)
    stages = {section.name: section for section in rig.laboratory.lockins}

    def ask(name: str, query: str) -> str:
        (piece,) = bench.hear(name, query, 1.0).pieces
        end = rig.reader(name).read_termination.encode()
        assert piece.data.endswith(end)
        return piece.data.removesuffix(end).decode()

    for reader in rig.readers:
        assert re.search(reader.identity.pattern, ask(reader.name, reader.identity.query))
        reply = parse_replies(reader, [ask(reader.name, query) for query in reader.queries])
        assert reply.status == "ok", reply
        found = {item.name: read_setting(item, ask(reader.name, item.query))
                 for item in reader.settings}  # fmt: skip
        if reader.name in stages:
            assert found["time_constant"] == stages[reader.name].time_constant_s
    assert found is not None
    xx, xy = rig.hall_bars[0].longitudinal.filter, rig.hall_bars[0].hall.filter
    assert xx is not None and xx.time_constant_setting and xx.poles_setting
    assert xy is not None and xy.poles == stages["lockin_xy"].poles
    assert xy.time_constant_s == stages["lockin_xy"].time_constant_s


@pytest.mark.parametrize(
    ("raw", "path", "words"),
    [
        (changed("run", "titel", to="a"), "run.titel", "unknown key; did you mean title?"),
        (changed("run", "title", to="a/b"), "run.title", "(found 'a/b')"),
        (changed("target", "confidence", to=True), "target.confidence", "number (found True)"),
        (changed("target", "confidence", to="0.95"), "target.confidence", "(found '0.95')"),
        (changed("ramp", "rate_T_per_min", to=float("nan")), "ramp.rate_T_per_min", "finite"),
        (changed("ramp", "rate_T_per_min", to=float("inf")), "ramp.rate_T_per_min", "finite"),
        (changed("ramp", "rate_T_per_min", to=10**400), "ramp.rate_T_per_min", "found 1000"),
        (changed("ramp", "path_T", to=[1.0]), "ramp.path_T", "at least two fields"),
        (changed("field", "reader", to="magnat"), "field.reader", "did you mean magnet?"),
        (changed("field", "value", to="feild"), "field.value", "did you mean field?"),
        (changed("hall_bars", 0, "squares", to=-4), "hall_bars[0].squares", "greater than 0"),
        (changed("hall_bars", 0, "hall", "x", to="z"), "hall_bars[0].hall.x", "no such value"),
        (changed("hall_bars", 0, "length_m", to=1.0), "hall_bars[0]", "give either squares"),
        (changed("readers", 2, "name", to="lockin_xx"), "readers", "name given twice"),
        (changed("readers", 0, "timeout_ms", to=0.5), "readers[0].timeout_ms", "integer"),
        (changed("readers", 0, "values", 0, "unit", to="mV"), "readers[0].values[0].unit", "'V'"),
        (changed("readers", 1, "fields", to=1), "readers[1]", "beyond the reply's fields = 1"),
        (changed("readers", 0, "settings", 0, "codes", to={"1": []}),
         "readers[0].settings[0].codes.1", "number, or input"),
        (changed("readers", 0, "elsewhere", to={
            "publish": "tcp://192.168.1.30:42001", "answer": "tcp://127.0.0.1:42002"}),
         "readers[0].elsewhere", "so keys are needed: make them by `rampside keys make`"),
        (changed("readers", 0, "elsewhere", to={
            "publish": "tcp://cryostat:42001", "answer": "tcp://0.0.0.0:42002"}),
         "readers[0].elsewhere.publish", "with a number (found 'tcp://cryostat:42001')"),
        (changed("readers", 0, "elsewhere", to={
            "publish": "tcp://127.0.0.1:42001", "answer": "tcp://0.0.0.0:42002"}),
         "readers[0].elsewhere.answer", "not the address of one computer"),
        (changed("readers", 0, "elsewhere", to={
            "publish": "tcp://127.0.0.1:42001", "answer": "tcp://127.0.0.1:42001"}),
         "readers[0].elsewhere", "must be different"),
        (changed("readers", 0, "elsewhere", to={
            "publish": "tcp://[::1]:0", "answer": "tcp://[::1]:42001", "computer": "a b"}),
         "readers[0].elsewhere.computer", "pattern"),
        (changed("readers", 0, "elsewhere", to={
            "publish": "tcp://[::1]:0", "answer": "tcp://[::1]:42001"}),
         "readers[0].elsewhere.publish", "needs a port from 1 on"),
        (changed("keys", to={"folder": ""}), "keys.folder", "at least 1 character"),
        (changed("keys", to={"folders": "x"}), "keys.folders", "did you mean folder?"),
        (changed("laboratory", "magnet", "path_T", to=[0, 0]),
         "laboratory.magnet.path_T", "no two equal ones"),
        (changed("laboratory", "lockins", 0, "time_constant_s", to=0.2),
         "laboratory.lockins[0]", "time_constant_s must be one of"),
        (changed("laboratory", "lockins", 0, "name", to="lockin_xy"),
         "laboratory", "name given twice: lockin_xy"),
        (changed("laboratory", "lockins", 0, "port", to=47103),
         "laboratory", "port given twice: 47103"),
        (changed("laboratory", "misbehaviours", to=[{"instrument": "x", "what": "drop"}]),
         "laboratory", "no instrument is called 'x'"),
        (changed("laboratory", "misbehaviours",
                 to=[{"instrument": "magnet", "what": "off", "replies": 3}]),
         "laboratory.misbehaviours[0]", '"off" is not about replies'),
        (changed("hold", "command", to="PAUSE\n"), "hold.command", "printable"),
        (changed("hold", "command", to="P\x1bA"), "hold.command", "printable"),
        (changed("hold", "command", to=""), "hold.command", "at least 1"),
        (changed("hold", "command", to="PAUS\u00c9"), "hold", "can't be written as encoding"),
        (changed("hold", "write_termination", to="S"), "hold", "what ends a line"),
        (changed("hold", "reply", to="("), "hold.reply", "is not a regular expression"),
        (changed("hold", "identity", to={}), "hold", "nobody else gets the command"),
        (changed("hold", "standing_T", to=0.01), "hold", "either standing_T_per_min or"),
        (changed("hold", "standing_T_per_min", to=1.0), "hold.standing_T_per_min", "below 0.6"),
        (changed("hold", "standing_for_s", to=9.0), "hold", "longer than standing_for_s"),
        (changed("hold", "standing_for_s", to=0.5), "hold.standing_for_s", "6 field readings"),
        (changed("hold", "comand", to="A"), "hold.comand", "did you mean command?"),
        (changed("hold", to={}), "hold.command", "missing"),
        (without("ramp"), "hold", "needs a [ramp]"),
    ],
)  # fmt: skip
def test_a_mistake_is_told_with_its_place_its_rule_and_what_was_found(
    raw: dict[str, Any], path: str, words: str
) -> None:
    problems = problems_of(raw)
    assert path in problems, problems
    assert words in problems[path]


def test_a_serial_line_is_not_shared_between_a_reader_and_hold() -> None:
    raw = changed("readers", 2, "resource", to="ASRL/dev/ttyUSB0::INSTR")
    raw["hold"]["resource"] = "ASRL/dev/ttyUSB0::INSTR"
    assert "one program at a time" in problems_of(raw)["hold.resource"]


def test_all_mistakes_are_told_at_once() -> None:
    raw = changed("run", "titel", to="a")
    del raw["field"]
    raw["readers"][0]["timeout_ms"] = "soon"
    raw["hall_bars"][0]["hall"]["reader"] = "nobody"
    assert set(problems_of(raw)) == {
        "run.titel", "field", "readers[0].timeout_ms", "hall_bars[0].hall.reader",
    }  # fmt: skip


def test_a_file_that_can_not_be_read_says_why(tmp_path: Path) -> None:
    with pytest.raises(ConfigError, match="No such file"):
        load(tmp_path / "nothing.toml")
    with pytest.raises(ConfigError, match="Is a directory"):
        load(tmp_path)


@pytest.mark.parametrize(
    ("data", "words"),
    [
        (b"[run]\ntitle = \n", "line 2, column 9"),
        (b"[run]\n\xff", "byte 6: is not UTF-8"),
        (b"a = " + b"1" * 5000, "TOML: "),
        (b"a = " + b"[" * 5000, "TOML: "),
        (b"[run]\ntitle = 0x" + b"f" * 5000, "a number of thousands of digits"),
        (b'[run]\n"\\u001b[2J" = 1', 'run."\\u001b[2J": unknown key'),
        (b'[run]\ntitle = "' + b"x" * 10_000 + b'"', "xxx..."),
    ],
)
def test_what_is_no_toml_or_far_from_a_configuration_is_a_mistake_too(
    data: bytes, words: str
) -> None:
    with pytest.raises(ConfigError) as caught:
        parse(data, "rig.toml")
    assert str(caught.value).startswith("rig.toml: ")
    assert words in str(caught.value)
    assert len(str(caught.value)) < 2000


def test_the_mark_that_some_editors_put_first_does_no_harm() -> None:
    assert parse(b"\xef\xbb\xbf" + DEMO) == parse(DEMO.replace(b"\n", b"\r\n")) == parse(DEMO)


def paths_in(node: Any, at: tuple[str | int, ...] = ()) -> Iterator[tuple[str | int, ...]]:
    """The place of every value."""
    items = node.items() if isinstance(node, dict) else enumerate(node)
    for key, value in items:
        yield (*at, key)
        if isinstance(value, dict | list):
            yield from paths_in(value, (*at, key))


PATHS = list(paths_in(RAW))
KEYS = sorted(
    {part for path in PATHS for part in path if isinstance(part, str)}
    | {"table", "window", "elsewhere", "measured", "shunt_ohm", "serial", "misbehaviours", "column"}
)
SCALARS = st.one_of(
    st.booleans(),
    st.integers() | st.just(10**400),
    st.floats(),
    st.text(max_size=8),
    st.datetimes(),
    st.sampled_from(["X", "x", "XY", "bar", "magnet", "lockin_xx", "table", "T", "V", "(", "\0"]),
)
VALUES = st.recursive(
    SCALARS,
    lambda inner: st.lists(inner, max_size=4)
    | st.dictionaries(st.sampled_from(KEYS) | st.text(max_size=4), inner, max_size=4),
    max_leaves=12,
)
CHANGES = st.lists(
    st.tuples(st.sampled_from(PATHS), st.sampled_from(["set", "add", "delete"]),
              st.sampled_from(KEYS), VALUES),
    min_size=1, max_size=3,
)  # fmt: skip
FUZZ = settings(derandomize=True, deadline=None, suppress_health_check=list(HealthCheck))


def only_config_error(raw: dict[str, Any]) -> None:
    """A configuration comes out, or a mistake that can be told."""
    try:
        assert isinstance(validate(raw), Rig)
    except ConfigError as error:
        assert error.problems
        str(error).encode("utf-8", "surrogatepass")


@settings(FUZZ, max_examples=500)
@given(CHANGES)
@example([(("hall_bars", 0, "hall", "reader"), "set", "x", ["lockin_xy"])])
@example([(("readers", 0, "name"), "set", "x", {"a": 1})])
def test_a_good_configuration_changed_at_will_raises_nothing_but_config_error(
    changes: list[tuple[tuple[str | int, ...], str, str, Any]],
) -> None:
    raw = copy.deepcopy(RAW)
    for path, how, key, value in changes:
        node: Any = raw
        try:
            for part in path[:-1]:
                node = node[part]
            if how == "set":
                node[path[-1]] = value
            elif how == "delete":
                del node[path[-1]]
            else:
                node[path[-1]][key] = value
        except (KeyError, IndexError, TypeError):
            continue  # an earlier change took that place away
    only_config_error(raw)


@settings(FUZZ, max_examples=200)
@given(st.dictionaries(st.sampled_from(KEYS) | st.text(max_size=4), VALUES, max_size=6))
def test_any_dictionary_raises_nothing_but_config_error(raw: dict[str, Any]) -> None:
    only_config_error(raw)


@settings(FUZZ, max_examples=300)
@given(st.binary() | st.text('[]{}=".\n#abc1_-\'', max_size=60).map(str.encode))
def test_any_bytes_raise_nothing_but_config_error(data: bytes) -> None:
    with pytest.raises(ConfigError):
        parse(data)
