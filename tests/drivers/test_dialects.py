"""Finding dialects, and checking what stands in them."""

from __future__ import annotations

import copy
import math
from collections.abc import Mapping
from importlib.metadata import EntryPoint
from pathlib import Path
from typing import Any

import pytest
from sweeprig_drivers import generator, line_tachometer, multimeter, scope, sound_meter, supply, thermometer
from sweeprig_drivers.dialect import Dialect, Form, number_text, refusal

from sweeprig.dialects import GROUP, find_dialect, known_dialects
from sweeprig.errors import ConfigError, UnknownAdapter

SHIPPED: dict[str, tuple[str, Mapping[str, Form], Mapping[str, tuple[float, float]], tuple[str, ...]]] = {
    "read-aperture": ("multimeter", multimeter.COMMANDS, {}, ()),
    "source-and-measure": ("supply", supply.COMMANDS, supply.VALUES, ()),
    "measure-channel-list": ("scope", scope.COMMANDS, {}, ()),
    "pulse-two-levels": ("generator", generator.COMMANDS, {}, generator.TEXTS),
    "temperature-channel-list": ("thermometer", thermometer.COMMANDS, {}, ()),
    "sound-level-average": ("sound-meter", sound_meter.COMMANDS, {}, ()),
    "speed-lines": ("line-tachometer", line_tachometer.COMMANDS, line_tachometer.VALUES, line_tachometer.TEXTS),
}
GOOD = 'kind = "scope"\n[commands]\nidentity = "*IDN?"\n'


def write(folder: Path, name: str, text: str = GOOD) -> Path:
    (folder / "dialects").mkdir(parents=True, exist_ok=True)
    (folder / "dialects" / f"{name}.toml").write_text(text, encoding="utf-8")
    return folder


@pytest.fixture
def package(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, request: pytest.FixtureRequest) -> tuple[Path, EntryPoint]:
    """A third party's package with a folder `dialects`, named after the test so that no import is shared."""
    name = "pkg_" + "".join(letter if letter.isalnum() else "_" for letter in request.node.name)
    folder = tmp_path / "site" / name
    folder.mkdir(parents=True)
    (folder / "__init__.py").write_text("", encoding="utf-8")
    monkeypatch.syspath_prepend(str(tmp_path / "site"))
    return folder, EntryPoint("theirs", name, GROUP)


def test_every_shipped_dialect_is_whole() -> None:
    """Each file that is installed passes the check of the adapter it is for, and there is no file beyond these."""
    assert set(known_dialects(None)) == set(SHIPPED)
    for name, (kind, commands, values, texts) in SHIPPED.items():
        table = find_dialect(name, None)
        dialect = Dialect(name, table, kind, commands, values, texts)
        assert all(dialect.has(key) for key in commands)
        assert table["about"]


def test_a_users_own_lies_beside_the_rig_file(tmp_path: Path) -> None:
    """`dialects/NAME.toml` beside the rig file is found, and a folder without one is no trouble."""
    assert find_dialect("mine", write(tmp_path, "mine"))["kind"] == "scope"
    assert find_dialect("read-aperture", tmp_path / "nowhere")["kind"] == "multimeter"


def test_a_package_brings_its_own(package: tuple[Path, EntryPoint]) -> None:
    """An entry may name a package that has a folder `dialects`, or the folder itself."""
    folder, entry = package
    write(folder, "theirs")
    assert find_dialect("theirs", None, [entry])["kind"] == "scope"
    inner = EntryPoint("theirs", f"{entry.value}.dialects", GROUP)
    assert find_dialect("theirs", None, [inner])["kind"] == "scope"


def test_an_unknown_name_lists_the_known(tmp_path: Path) -> None:
    """The error names what there is and where an own one would go."""
    with pytest.raises(UnknownAdapter) as caught:
        find_dialect("read-apperture", write(tmp_path, "mine"))
    assert str(caught.value) == (
        "no dialect has this name: 'read-apperture' (allowed: measure-channel-list, mine, pulse-two-levels, "
        "read-aperture, sound-level-average, source-and-measure, speed-lines, temperature-channel-list). "
        "write dialects/read-apperture.toml beside the rig file, or correct the name (sweeprig manual dialects)"
    )


@pytest.mark.parametrize("name", ["../secret", "a/b", "Read-Aperture", "", "a b", ".hidden", "a--b"])
def test_a_name_is_never_a_path(tmp_path: Path, name: str) -> None:
    """Nothing outside the folders can be named."""
    (tmp_path / "secret.toml").write_text(GOOD, encoding="utf-8")
    with pytest.raises(UnknownAdapter, match="small letters, digits"):
        find_dialect(name, write(tmp_path, "mine"))


def test_a_name_that_is_there_twice_is_an_error(tmp_path: Path, package: tuple[Path, EntryPoint]) -> None:
    """Neither a user's own nor another package's replaces one silently; the error names both places."""
    with pytest.raises(ConfigError, match="more than once") as caught:
        find_dialect("read-aperture", write(tmp_path, "read-aperture"))
    assert "sweeprig_drivers.dialects" in str(caught.value)
    folder, entry = package
    write(folder, "mine")
    with pytest.raises(ConfigError, match="more than once"):
        find_dialect("mine", write(tmp_path, "mine"), [entry])


def test_a_broken_package_is_named_only_when_it_matters(tmp_path: Path, package: tuple[Path, EntryPoint]) -> None:
    """A package that cannot be imported does not stop others, and its reason is told when the name is not found."""
    folder, entry = package
    (folder / "__init__.py").write_text("raise RuntimeError('half installed')", encoding="utf-8")
    assert find_dialect("mine", write(tmp_path, "mine"), [entry])["kind"] == "scope"
    with pytest.raises(UnknownAdapter, match="RuntimeError: half installed"):
        find_dialect("theirs", None, [entry])


@pytest.mark.parametrize(
    ("data", "text"),
    [
        (b"kind = ", "dialects/mine.toml:1: the dialect file is not TOML"),
        (b'kind = "scope"\nkind = "scope"', "dialects/mine.toml:2: the dialect file is not TOML"),
        (b"kind = '\xff'", "dialects/mine.toml: the dialect file is not TOML"),
        (b"#" * 70_000, "the dialect file is too large: more than 65536 bytes"),
    ],
)
def test_an_unreadable_file_is_named_with_its_line(tmp_path: Path, data: bytes, text: str) -> None:
    """Faulty TOML, bytes that are no text, and files that are no dialect."""
    write(tmp_path, "mine")
    (tmp_path / "dialects" / "mine.toml").write_bytes(data)
    with pytest.raises(ConfigError) as caught:
        find_dialect("mine", tmp_path)
    assert text in str(caught.value)


# What stands in them


@pytest.mark.parametrize(
    ("text", "why"),
    [
        ("SOUR:VOLT 12", ""),
        ("MEAS:FREQ? (@1)", ""),
        ("VOLT 1;OUTP ON", "begins another command"),
        ("DATA #15hello", "begins a block"),
        ("VOLT 1\nOUTP ON", "control character"),
        ("VOLT\t1", "control character"),
        ("VOLT 1\x7f", "control character"),
        ("VOLT 1\x00", "control character"),
        ("VOLT 1µ", "not ASCII"),
        ("VOLT\u20281", "not ASCII"),
        (" ", "is empty"),
        ("V" * 256, "longer than 255"),
    ],
)
def test_what_goes_to_an_instrument_is_looked_through(text: str, why: str) -> None:
    """Whatever could begin a second command, a block or a second line is refused."""
    assert why in refusal(text)
    assert bool(refusal(text)) == bool(why)


@pytest.mark.parametrize("value", [math.nan, math.inf, -math.inf])
def test_only_finite_numbers_become_text(value: float) -> None:
    """An instrument never gets `nan`."""
    with pytest.raises(ValueError, match="finite"):
        number_text(value)
    assert (number_text(0.2), number_text(25_000.0), number_text(1 / 3)) == ("0.2", "25000", "0.333333333")


@pytest.mark.parametrize("value", ["1;OUTP ON", "1\n", "#10", "1µ", "{range}", ""])
def test_a_hostile_value_is_not_filled_in(value: str) -> None:
    """Values pass the same look as the dialect's own texts."""
    dialect = Dialect("meter", find_dialect("read-aperture", None), "multimeter", multimeter.COMMANDS)
    with pytest.raises(ConfigError, match="meter: the value for 'range'"):
        dialect.command("function", range=value)
    assert dialect.command("function", range="100") == b"CONF:VOLT:DC 100"


@pytest.mark.parametrize(
    ("where", "value", "text"),
    [
        ("kind", "multimeter", "the dialect's 'kind' is for another kind of instrument"),
        ("maker", "x", "the dialect's 'maker' is not known"),
        ("reply", "block", "the dialect's 'reply' is a shape"),
        ("no_value", "OL", "the dialect's 'no_value' is not a list of texts"),
        ("no_value", [""], "the dialect's 'no_value' is not a list of texts"),
        ("commands", [], "the dialect's 'commands' is not a table"),
        ("commands.reset", "*RST", "the dialect's 'commands.reset' is not known"),
        ("commands.volts", None, "the dialect's 'commands.volts' is missing"),
        ("commands.volts", 5, "the dialect's 'commands.volts' is not a text"),
        ("commands.volts", "SOUR:VOLT 12", "'commands.volts' has other places to fill in"),
        ("commands.volts", "SOUR:VOLT {volts} {volts}", "'commands.volts' has other places to fill in"),
        ("commands.volts", "SOUR:VOLT {volts.__class__}", "'commands.volts' has other places to fill in"),
        ("commands.volts", "SOUR:VOLT {volts} {", "'commands.volts' has other places to fill in"),
        ("commands.volts", "SOUR:VOLT? {volts}", "'commands.volts' is of the wrong kind"),
        ("commands.volts_query", "SOUR:VOLT", "'commands.volts_query' is of the wrong kind"),
        ("commands.on", "OUTP ON;*RST", "'commands.on' has a ';'"),
        ("values.limiting_mask", 0, "'values.limiting_mask' is missing or out of range"),
        ("values.limiting_mask", True, "'values.limiting_mask' is missing or out of range"),
        ("values.average_s", None, "'values.average_s' is missing or out of range"),
        ("values.gain", 1, "'values.gain' is not known"),
    ],
)
def test_a_faulty_dialect_is_refused(where: str, value: object, text: str) -> None:
    """Row B3: The error names the instrument, the key and the remedy."""
    table: dict[str, Any] = copy.deepcopy(find_dialect("source-and-measure", None))
    *path, last = where.split(".")
    inner = table[path[0]] if path else table
    inner.pop(last, None)
    inner.update({last: value} if value is not None else {})
    with pytest.raises(ConfigError) as caught:
        Dialect("supply", table, "supply", supply.COMMANDS, supply.VALUES)
    assert f"supply: the dialect's '{where}'" in str(caught.value)
    assert text.removeprefix("the dialect's ") in str(caught.value)
    assert caught.value.remedy == "correct the dialect file"


def test_no_dialect_at_all_says_what_to_write() -> None:
    """A rig file without the line is told so, not that twelve commands are missing."""
    with pytest.raises(ConfigError, match=r"needs a dialect for a supply and got none.*name one in the rig file"):
        Dialect("supply", {}, "supply", supply.COMMANDS, supply.VALUES)
