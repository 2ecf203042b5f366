"""Dialect files: the shipped ones load, and every mistake of a user's own is named."""

from __future__ import annotations

from importlib import resources
from pathlib import Path

import pytest

from benchkit.errors import InputError
from instruments.dialects import (
    Dialect,
    MeterDialect,
    SupplyDialect,
    load_dialect,
    shipped_dialects,
)


def shipped_text(name: str) -> str:
    return resources.files("instruments.dialects").joinpath(f"{name}.toml").read_text("utf-8")


def edited(folder: Path, name: str, *changes: tuple[str, str]) -> Path:
    text = shipped_text(name)
    for old, new in changes:
        assert old in text
        text = text.replace(old, new)
    path = folder / "own.toml"
    path.write_text(text, encoding="utf-8")
    return path


def mistakes(path: Path) -> str:
    with pytest.raises(InputError) as caught:
        load_dialect(path, Dialect)
    return str(caught.value)


def test_the_shipped_dialects_are_these() -> None:
    assert shipped_dialects() == (
        "load-plain",
        "meter-scan",
        "meter-single",
        "supply-list",
        "supply-plain",
        "supply-select",
        "switch-plain",
        "thermometer-scan",
    )


@pytest.mark.parametrize("name", shipped_dialects())
def test_a_shipped_dialect_loads(name: str) -> None:
    dialect = load_dialect(name, Dialect)
    assert dialect.name == name
    assert name.startswith(dialect.kind)
    keys = [key for key, _ in dialect.requests()]
    assert len(keys) == len(set(keys)) > 1


def test_a_users_file_is_named_by_its_path(tmp_path: Path) -> None:
    path = edited(tmp_path, "supply-list", (":OUTP ON,", ":OUTPUT ON,"))
    dialect = load_dialect(path, SupplyDialect)
    assert dialect.name == "own"
    assert dialect.fill(dialect.output.on, "2") == ":OUTPUT ON,(@2)"


def test_select_goes_before_every_message() -> None:
    assert load_dialect("supply-select", SupplyDialect).select("3") == ":INST:NSEL 3;"
    assert load_dialect("supply-list", SupplyDialect).select("3") == ""


def test_an_unknown_name_suggests_the_nearest() -> None:
    with pytest.raises(InputError, match="did you mean 'supply-plain'"):
        load_dialect("suply-plain", SupplyDialect)


def test_the_wrong_kind_is_refused() -> None:
    with pytest.raises(InputError, match=r"'supply' was found where a 'meter' is needed"):
        load_dialect("supply-plain", MeterDialect)


@pytest.mark.parametrize(
    "key",
    ["terminator", "open_s", "identify_s", "set_s", "read_s", "slow_s", "gap_s", "recover"],
)
def test_no_timing_has_a_silent_default(tmp_path: Path, key: str) -> None:
    lines = shipped_text("meter-scan").splitlines()
    path = tmp_path / "own.toml"
    path.write_text("\n".join(line for line in lines if not line.startswith(f"{key} =")))
    assert f"link.{key}: this entry is missing" in mistakes(path)


def test_all_mistakes_are_told_at_once_with_file_and_key(tmp_path: Path) -> None:
    path = edited(
        tmp_path,
        "supply-plain",
        ("set_s = 2.0", "sets_s = 2.0"),
        ('set = ":SOUR:VOLT {value}"', 'set = ":SOUR:VOLT {volts}"'),
        ('query = ":OUTP?"', 'query = ":OUTP? (@{channel})"'),
        ('on = ":OUTP ON"', 'on = "OUTP ON"'),
        ('current = ":MEAS:CURR?"', 'current = ":MEAS:CURR"'),
        ("bit = 0", "bit = 16"),
    )
    text = mistakes(path)
    assert all(line.startswith(f"{path}: ") for line in text.splitlines())
    assert "link.sets_s: unknown key; did you mean 'set_s'?" in text
    assert "link.set_s: this entry is missing" in text
    assert "voltage.set: the placeholder {value} is missing" in text
    assert "output.query: {channel} means nothing with channels.style 'none'" in text
    assert "output.on: every unit has to start with ':'" in text
    assert "measure.current: exactly one query" in text
    assert "constant_current.bit: " in text
    assert len(text.splitlines()) == 7


@pytest.mark.parametrize(
    ("name", "old", "new", "told"),
    [
        ("meter-scan", "{range},(@{channel})", "{range}", "range.set: the placeholder {channel}"),
        ("meter-scan", "{range},", "{range}{nplc},", "range.set: {nplc} means nothing here"),
        ("supply-plain", ":OUTP OFF", ":OUTP?", "output.off: a command is needed here"),
        ("supply-select", 'select = ":INST', '# ":INST', "channels: style 'select' needs 'select'"),
        ("supply-select", 'armed = ":SOUR:CURR', '# ":SOUR:CURR', "'arm' and 'armed' belong"),
        ("supply-plain", "tolerance = 0.05\n\n# Has", "\n\n# Has", "over_current: 'set', 'query'"),
        ("supply-plain", 'kind = "supply"', 'kind = "suply"', "kind: 'suply' is none of supply"),
        ("supply-plain", 'kind = "supply"', 'kind = "supply', "this is not TOML"),
        ("supply-plain", "set_s = 2.0", 'set_s = "2"', "link.set_s: "),
        ("supply-plain", "set_s = 2.0", "set_s = 0", "link.set_s: "),
        ("supply-plain", '":SYST:ERR?"', '":SYST:ERR? {channel}"', "link.error_query: the error"),
        ("supply-plain", 'kind = "supply"', 'name = "x"\nkind = "supply"', "name: leave it out"),
        ("supply-plain", "[output]", "[outputs]", "outputs: unknown key; did you mean 'output'?"),
        ("meter-scan", "(@{routes})", "(@101)", "burst.prepare: the placeholder {routes} is miss"),
        ("meter-scan", "{scans}", "{channel}", "burst.prepare: the placeholder {scans} is missing"),
        ("meter-scan", '":ABOR"', '":ABOR {channel}"', "burst.abort: {channel} means nothing here"),
        ("meter-scan", '":FETC?"', '":FETC"', "burst.fetch: exactly one query"),
        ("meter-scan", "nplc = 0.02", "nplc = 0.03", "burst: aperture_nplc 0.03 is none of 0.02,"),
        ("meter-scan", "most = 10000", "most = 0", "burst.most: "),
        ("meter-scan", "route_s = 0.001", "", "burst.route_s: this entry is missing"),
        (
            "meter-single",
            ":COUN {scans}",
            ":COUN {scans},{routes}",
            "burst.prepare: {routes} means",
        ),
        ("switch-plain", 'style = "list"', 'style = "none"', "channels: style 'none' cannot name"),
        ("switch-plain", ":ROUT:OPEN (@{channel})", ":ROUT:OPEN", "relay.open: the placeholder"),
    ],
)
def test_a_mistake_is_named(tmp_path: Path, name: str, old: str, new: str, told: str) -> None:
    assert told in mistakes(edited(tmp_path, name, (old, new)))


def test_a_meter_may_have_no_burst(tmp_path: Path) -> None:
    path = tmp_path / "own.toml"
    path.write_text(shipped_text("meter-scan").partition("[burst]")[0], encoding="utf-8")
    assert load_dialect(path, MeterDialect).burst is None


def test_a_missing_file_is_named(tmp_path: Path) -> None:
    assert "none.toml: the dialect cannot be read" in mistakes(tmp_path / "none.toml")


def test_a_channel_that_could_change_the_message_is_refused() -> None:
    dialect = load_dialect("supply-list", SupplyDialect)
    for channel in (None, "", "1);:OUTP ON,(@1", "1;2", "1,2"):
        with pytest.raises(InputError, match="dialect supply-list: channel"):
            dialect.fill(dialect.output.off, channel)
    plain = load_dialect("supply-plain", SupplyDialect)
    with pytest.raises(InputError, match="has none"):
        plain.fill(plain.output.off, "1")
