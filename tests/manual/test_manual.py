"""The manual ships whole: every topic has a text, and the texts keep their promises to each other."""

from __future__ import annotations

import re
import textwrap
import tomllib
from collections.abc import Callable
from importlib.resources import files
from typing import Any

import pytest

from sweeprig import manual
from sweeprig.errors import ConfigError
from sweeprig.quantities import Accuracy
from sweeprig.roles import Adapter, AdapterSetup, Answer, Window


def test_every_text_that_ships_is_a_topic() -> None:
    """The Markdown files of the room and the list of topics are the same set."""
    shipped = {each.name.removesuffix(".md") for each in files(manual).iterdir() if each.name.endswith(".md")}
    assert shipped == set(manual.topics())


@pytest.mark.parametrize("topic", manual.topics())
def test_topic_has_a_heading_and_a_body(topic: str) -> None:
    """A topic begins with one first-level heading and says more than a few words."""
    text = manual.text(topic)
    assert text.startswith("# ")
    assert len(re.findall(r"^# ", text, re.M)) == 1
    assert len(text.split()) > 120


@pytest.mark.parametrize("topic", manual.topics())
def test_topics_named_in_a_text_exist(topic: str) -> None:
    """Each `sweeprig manual X` in a text names a topic."""
    named = set(re.findall(r"sweeprig manual ([a-z][a-z-]*)", manual.text(topic)))
    assert named <= set(manual.topics())


def code_blocks(topic: str) -> list[str]:
    """The indented blocks of a topic, without their indent."""
    blocks = re.findall(r"(?:^(?: {4}.*)?\n)+", manual.text(topic), re.M)
    return [textwrap.dedent(block) for block in blocks if block.strip()]


def block_with(topic: str, words: str) -> str:
    return next(block for block in code_blocks(topic) if words in block)


def test_adapter_example_works() -> None:
    """The thermometer of `adapters` does what its text says, also with no value, and refuses an unknown option."""
    room: dict[str, Any] = {}
    exec(block_with("adapters", "class Thermometer"), room)
    setup = AdapterSetup("hut", accuracy={"temperature": Accuracy(0.0, 0.3)})
    steps = room["Thermometer"](setup).measure(Window(1.0))
    assert next(steps).message == b"TEMP?"
    with pytest.raises(StopIteration) as done:
        steps.send(Answer(b"+23.5", 4.0))
    reading = done.value.value["temperature"]
    assert (reading.value, reading.unit, reading.at, reading.channel) == (23.5, "degC", 4.0, "hut.temperature")
    with pytest.raises(ConfigError, match="no options"):
        room["Thermometer"](AdapterSetup("hut", options={"gate": "1 s"}))


def test_adapter_example_keeps_the_contract(capsys: pytest.CaptureFixture[str]) -> None:
    """The thermometer of `adapters` passes the whole suite, by the lines that the page shows, and has every method."""
    room: dict[str, Any] = {"setup": AdapterSetup("hut")}
    exec(block_with("adapters", "class Thermometer"), room)
    exec(block_with("adapters", "import Scripted, checks"), room)
    said = capsys.readouterr().out.splitlines()
    assert len(said) >= 15
    assert [line for line in said if not line.startswith("kept")] == []
    assert isinstance(room["Thermometer"](room["setup"]), Adapter)


def test_heartbeat_example_works(sweeprig_bench: Callable[..., Any]) -> None:
    """The heartbeat test of `testing` passes as printed."""
    room: dict[str, Any] = {}
    exec(block_with("testing", "def test_board_stops_without_heartbeat"), room)
    room["test_board_stops_without_heartbeat"](sweeprig_bench)


@pytest.mark.parametrize("topic", ["library", "adapters", "testing"])
def test_python_examples_are_python(topic: str) -> None:
    """Every indented block of Python in these topics compiles; shell and TOML blocks are left out."""
    blocks = [b for b in code_blocks(topic) if not re.match(r"\s*(\[|sweeprig )", b)]
    assert blocks
    assert [compile(block, topic, "exec") for block in blocks]


def test_dialect_example_is_the_shipped_form() -> None:
    """The dialect file shown in `dialects` is valid TOML with the tables that it explains."""
    shown = tomllib.loads(block_with("dialects", 'kind = "multimeter"'))
    assert shown["kind"] == "multimeter"
    assert {"identity", "read", "aperture_query"} <= set(shown["commands"])


def test_unknown_topic_names_the_nearest() -> None:
    """A misspelt topic is an error of usage that shows the value, all topics and the nearest."""
    with pytest.raises(ConfigError, match=r"job-file .*allowed: start.*Did you mean 'job-files'\?") as caught:
        manual.text("job-file")
    assert caught.value.exit_code == 2


def test_cautions_name_the_first_things() -> None:
    """The short cautions say that software is no safety device and that local codes come first."""
    cautions = manual.cautions()
    assert len(cautions) >= 8
    assert cautions[0].startswith("Software is not the safety device.")
    assert any("Local codes and licensed practice come first" in each for each in cautions)
