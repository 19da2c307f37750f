"""Serial ports by names that last, in the job that a run is frozen with."""

from __future__ import annotations

from pathlib import Path

import pytest

from sweeprig.conduct.stable_ports import with_stable_ports
from sweeprig.job import document, load
from sweeprig.link import serial_port


def test_the_frozen_job_names_ports_that_last(short_job: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Row C3: A plain node is replaced by the stable name that leads to it, so that a later process, or the supervisor
    that switches off, finds the same adapter; other addresses stay as they are, and the job reads back the same."""
    node, names = tmp_path / "ttyUSB0", tmp_path / "by-id"
    node.touch()
    names.mkdir()
    (names / "usb-board").symlink_to(node)
    monkeypatch.setattr(serial_port, "STABLE_NAMES", (names,))
    job = load(short_job)
    instruments = dict(job.rig.instruments)
    given = {"board": f"serial:{node}?baud=9600", "supply": "TCPIP0::192.0.2.7::5025::SOCKET", "meter": "serial:COM3"}
    for name, address in given.items():
        instruments[name] = instruments[name].model_copy(update={"address": address})
    job = job.model_copy(update={"rig": job.rig.model_copy(update={"instruments": instruments})})
    frozen = with_stable_ports(job)
    assert frozen.rig.instruments["board"].address == f"serial:{names}/usb-board?baud=9600"
    for name in ("supply", "meter", "scope"):
        assert frozen.rig.instruments[name].address == instruments[name].address
    assert frozen.model_copy(update={"rig": job.rig}) == job
    assert f"{names}/usb-board" in document(frozen)
