"""Every refusal of a simulated fault in a rig file: where it points, what it allows and what it says to do."""

from __future__ import annotations

import re
from collections.abc import Callable
from pathlib import Path

import pytest

from sweeprig.errors import ConfigError
from sweeprig.job import document, load
from sweeprig.job.fault_models import FAULT_KINDS
from sweeprig.job.loader import load_text

RIG = "rigs/shelter-bench.toml"

CASES = [
    ("no such kind", 'kind = "no_replay"\nexchange = 3', "kind", "late_reply.*mean \"no_reply\"?"),
    ("no instrument", 'kind = "no_reply"\nexchange = 3', "instrument", "must be stated.*board, supply, meter, scope"),
    ("unknown instrument", 'kind = "no_reply"\ninstrument = "metre"\nexchange = 3', "instrument", 'mean "meter"'),
    ("no time", 'kind = "no_reply"\ninstrument = "meter"', "exchange", "when no_reply acts.*exchange, probability or"),
    ("zeroth exchange", 'kind = "cr_lf"\ninstrument = "meter"\nexchange = 0', "exchange", "1 to 1000000000.*from 1"),
    ("part of one", 'kind = "cr_lf"\ninstrument = "meter"\nexchange = 1.5', "exchange", "whole number"),
    ("too many", 'kind = "cr_lf"\ninstrument = "meter"\nexchange = 1\nexchanges = 0', "exchanges", "numbers 1 to"),
    ("how many of what", 'kind = "cr_lf"\ninstrument = "meter"\nstart = "1 s"\nexchanges = 2', "exchanges", "Add exch"),
    ("two ends", 'kind = "cr_lf"\ninstrument = "meter"\nexchange = 1\nexchanges = 2\nlasts = "3 s"', "exchanges",
     "Remove exchanges or lasts"),
    ("never", 'kind = "cr_lf"\ninstrument = "meter"\nprobability = "0 %"', "probability", "above 0 %.*never comes"),
    ("more than always", 'kind = "cr_lf"\ninstrument = "meter"\nprobability = "120 %"', "probability", "up to 100 %"),
    ("before the start", 'kind = "switch_open"\nstart = "-1 s"', "start", "0 s to 168 h.*week"),
    ("no length", 'kind = "switch_open"\nstart = "1 s"\nlasts = "0 s"', "lasts", "above 0 s.*of no length"),
    ("longer than never", 'kind = "late_reply"\ninstrument = "meter"\nexchange = 1\ndelay = "2 h"', "delay", "never"),
    ("without end", 'kind = "garbage"\ninstrument = "meter"\nexchange = 1\ncount = 70000', "count", "1 to 65536.*end"),
    ("beyond a rig", 'kind = "supply_pumped_up"\nstart = "1 s"\nvoltage = "200 V"', "voltage", "0 V to 120 V.*rig"),
    ("no ASCII", 'kind = "text_marker"\ninstrument = "meter"\nexchange = 1\ntext = "µ"', "text", "printable ASCII"),
    ("not its strength", 'kind = "no_reply"\ninstrument = "meter"\nexchange = 1\ndelay = "1 s"', "delay",
     "no_reply takes no delay.*none of these.*Remove delay"),
    ("rig fault of an instrument", 'kind = "switch_open"\ninstrument = "board"\nstart = "1 s"', "instrument",
     "not of an instrument.*Remove it"),
    ("rig fault without time", 'kind = "switch_open"', "start", 'begins must be stated.*start = "60 s"'),
    ("rig fault by messages", 'kind = "switch_open"\nexchange = 3\nstart = "1 s"', "exchange", "no messages.*start"),
    ("unknown key", 'kind = "switch_open"\nstart = "1 s"\nlast = "1 s"', "last", 'mean "lasts"'),
]  # fmt: skip


@pytest.mark.parametrize(("fault", "key", "says"), [pytest.param(*case[1:], id=case[0]) for case in CASES])
def test_refused_with_place_and_remedy(
    configs: Path, refusal: Callable[[], ConfigError], fault: str, key: str, says: str
) -> None:
    """The error names the file, a line of the table, the key, what is allowed, and what to do."""
    rig = configs / RIG
    text = rig.read_text("utf-8") + "\n[[simulated_faults]]\n"
    rig.write_text(text + fault + "\n", "utf-8")
    error = refusal()
    assert error.where is not None
    assert error.where.file == str(rig)
    assert error.where.key == f"simulated_faults, item 1.{key}"
    assert error.where.line is not None
    assert error.where.line >= text.count("\n")
    assert re.search(says, str(error))
    assert error.allowed
    assert error.remedy


def test_a_bridge_has_no_diode_to_miss(configs: Path, refusal: Callable[[], ConfigError]) -> None:
    """A missing freewheel diode is refused where the stage is a half bridge."""
    rig = configs / RIG
    text = rig.read_text("utf-8").replace('stage = "low_side_diode"', 'stage = "half_bridge"')
    rig.write_text(text + '\n[[simulated_faults]]\nkind = "missing_diode"\nstart = "1 s"\n', "utf-8")
    assert "no diode to miss" in str(refusal())


def test_faults_go_into_the_frozen_job_and_only_they(configs: Path) -> None:
    """A job with faults reads back equal from its own text; without any, the text does not name them."""
    plain = document(load(configs / "demo.toml"))
    assert "simulated_faults" not in plain
    rig = configs / RIG
    table = '\n[[simulated_faults]]\nkind = "late_reply"\ninstrument = "meter"\nexchange = 4\ndelay = "2 s"\n'
    rig.write_text(rig.read_text("utf-8") + table, "utf-8")
    job = load(configs / "demo.toml")
    assert load_text(document(job)) == job
    assert job.rig.simulated_faults is not None
    assert job.rig.simulated_faults[0].seconds == 2.0


def test_every_kind_says_what_it_does() -> None:
    """Each kind's own line names the keys that it takes, and no others."""
    for kind, what in FAULT_KINDS.items():
        assert {key for key in ("delay", "count", "text", "voltage") if f"`{key}`" in what.about} == what.takes, kind
