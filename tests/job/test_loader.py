"""Loading: which file named what, bounds, several problems at once, inline tables, the frozen text and its hash."""

from __future__ import annotations

import copy
import hashlib
import pickle
import tomllib
from collections.abc import Callable
from datetime import UTC, datetime
from pathlib import Path

import pytest
import tomli_w

from sweeprig.errors import ConfigError, RoleMissing
from sweeprig.job import Job, document, freeze, job_hash, load, shipped
from sweeprig.job.freeze import with_deadline
from sweeprig.job.frozen_text import rig_document
from sweeprig.job.loader import load_text
from sweeprig.job.shipped import shipped_names
from sweeprig.job.toml_source import LARGEST_FILE

Spoil = Callable[[str, str, str], None]


def test_missing_rig_file_names_the_line_that_names_it(configs: Path, spoil: Spoil) -> None:
    """A rig file that is not there: the job file's line, the path looked for, and what lies in that folder."""
    spoil("demo.toml", "rigs/shelter-bench.toml", "rigs/shelter.toml")
    with pytest.raises(ConfigError) as caught:
        load(configs / "demo.toml")
    text = str(caught.value)
    assert text.startswith(
        f"{configs / 'demo.toml'}:2, rig: there is no such file: {configs / 'rigs' / 'shelter.toml'}"
    )
    assert f"In {configs / 'rigs'} lie: shelter-bench.toml" in text


def test_missing_folder_is_said_to_be_missing(configs: Path, spoil: Spoil) -> None:
    """When not even the folder is there, nothing is listed."""
    spoil("demo.toml", "motors/aspirator-fan.toml", "motor/aspirator-fan.toml")
    with pytest.raises(ConfigError, match=r"There is no folder .*motor either"):
        load(configs / "demo.toml")


def test_missing_job_file_lists_its_neighbours(configs: Path) -> None:
    """A job that is not there: what lies beside it."""
    with pytest.raises(ConfigError, match=r"there is no such file: .*demonstration\.toml\. In .* lie: demo\.toml"):
        load(configs / "demonstration.toml")


def test_folder_is_no_job(configs: Path) -> None:
    """A folder where a file is wanted is called one."""
    with pytest.raises(ConfigError, match=r"this is a folder where a file is wanted: .* lie: demo\.toml"):
        load(configs)


@pytest.mark.parametrize(
    ("part", "kind"),
    [("rigs/shelter-bench.toml", "rig"), ("motors/aspirator-fan.toml", "motor"), ("sweeps/evening.toml", "sweep")],
)
def test_part_given_as_a_job_is_recognised(configs: Path, part: str, kind: str) -> None:
    """A rig, motor or sweep file where a job is wanted is called what it is."""
    with pytest.raises(ConfigError, match=f"this is a {kind} file, and a job file is wanted"):
        load(configs / part)


def test_too_large_a_file_is_refused_unread(configs: Path) -> None:
    """More than the bound is refused with the bound; exactly the bound is read."""
    job = configs / "demo.toml"
    text = job.read_bytes()
    job.write_bytes(text + b"#" * (LARGEST_FILE - len(text)))
    assert load(job).title.startswith("Aspirating fan")
    job.write_bytes(text + b"#" * (LARGEST_FILE - len(text) + 1))
    with pytest.raises(ConfigError, match=r"too large for a job file: more than 1,000,000 bytes \(allowed: up to"):
        load(job)


def test_no_utf8_names_the_line_and_the_byte(configs: Path) -> None:
    """A file in another encoding is refused with the line of the first byte that is none of UTF-8's."""
    with (configs / "demo.toml").open("ab") as stream:
        stream.write('place = "Köln"\n'.encode("latin-1"))
    with pytest.raises(ConfigError, match=r"demo\.toml:6: the file is not text in UTF-8: byte 0xF6\. Save it as UTF-8"):
        load(configs / "demo.toml")


def test_byte_order_mark_is_no_error(configs: Path) -> None:
    """Some editors put a mark at the head of UTF-8; the file is read as if it had none."""
    job = configs / "demo.toml"
    plain = load(job)
    job.write_bytes(b"\xef\xbb\xbf" + job.read_bytes())
    assert load(job) == plain


def test_windows_line_ends_change_nothing(configs: Path) -> None:
    """Carriage returns at line ends neither change values nor lines."""
    sweep = configs / "sweeps" / "evening.toml"
    plain = load(configs / "demo.toml")
    sweep.write_bytes(sweep.read_bytes().replace(b"\n", b"\r\n"))
    assert load(configs / "demo.toml") == plain
    sweep.write_bytes(sweep.read_bytes().replace(b'"60 rpm"', b'"60 rmp"'))
    with pytest.raises(ConfigError, match=r"evening\.toml:8, lowest_speed"):
        load(configs / "demo.toml")


@pytest.mark.parametrize(
    ("broken", "line", "shown"),
    [
        ("[settle", 36, "[settle"),
        ("settle = 1 %", 36, "settle = 1 %"),
        ("[zero]", 36, "[zero]"),
        ('settle = "one', 36, 'settle = "one'),
        ("settle = [1,", 37, 'tolerance = "1 %"'),
    ],
)
def test_syntax_error_has_file_and_line(configs: Path, spoil: Spoil, broken: str, line: int, shown: str) -> None:
    """What is no TOML is refused with file, line and that line's text; the lines are counted by hand."""
    spoil("sweeps/evening.toml", "[settle]", broken)
    with pytest.raises(ConfigError, match=r"this is not TOML: .*, column ") as caught:
        load(configs / "demo.toml")
    assert caught.value.where is not None
    assert (caught.value.where.file, caught.value.where.line) == (str(configs / "sweeps" / "evening.toml"), line)
    assert caught.value.value == shown


def test_text_that_ends_too_early_names_its_last_line() -> None:
    """A list that is never closed is found wrong at the end of the file."""
    with pytest.raises(ConfigError, match=r"^job\.toml:3: this is not TOML: .* at the end of the file"):
        load_text('title = "x"\n\nrig = [1,')


def test_deep_nesting_is_refused_in_words() -> None:
    """Arrays nested thousands deep are a refusal, not a crash."""
    with pytest.raises(ConfigError, match="nested too deeply"):
        load_text(f"title = {'[' * 20_000}{']' * 20_000}")


def test_one_error_at_a_time_and_how_many_more(configs: Path, spoil: Spoil) -> None:
    """Three slips in three files: the rig's is shown, and the text says that two more are to come."""
    spoil("sweeps/evening.toml", '"60 rpm"', '"60 V"')
    spoil("motors/aspirator-fan.toml", 'kind = "brushed"', 'kind = "brush"')
    spoil("rigs/shelter-bench.toml", 'speed = "6000 rpm"', 'speed = "6000 Hz"')
    with pytest.raises(ConfigError) as caught:
        load(configs / "demo.toml")
    assert caught.value.where is not None
    assert caught.value.where.key == "limits.speed"
    assert "2 more problems show when this is mended" in str(caught.value)


def test_a_misspelt_required_key_is_one_problem(configs: Path, spoil: Spoil) -> None:
    """The unknown key is shown with its right spelling; that the right one is missing is not counted besides."""
    spoil("sweeps/evening.toml", "lowest_speed", "lowest_sped")
    with pytest.raises(ConfigError) as caught:
        load(configs / "demo.toml")
    assert 'Did you mean "lowest_speed"?' in str(caught.value)
    assert "more" not in str(caught.value)


def test_several_supplies_need_a_supply_role(configs: Path, spoil: Spoil) -> None:
    """Several supply voltages on a rig that cannot set one: the role is missing, and the sweep's line is named."""
    spoil("rigs/shelter-bench.toml", 'supply = "supply"\n', "")
    assert load(configs / "demo.toml").rig.roles.get("supply") is None
    spoil("sweeps/evening.toml", '["12 V"]', '["12 V", "10.8 V"]')
    with pytest.raises(RoleMissing, match=r"2 supply voltages.*ask for one voltage only \(.*evening\.toml:4, supply\)"):
        load(configs / "demo.toml")


def test_control_input_needs_a_supply_role(configs: Path, spoil: Spoil) -> None:
    """A fan whose open input means full speed is off only without supply: the rig must be able to take it away."""
    spoil("rigs/shelter-bench.toml", 'drive_kind = "power_switch"', 'drive_kind = "control_input"')
    spoil("rigs/shelter-bench.toml", 'supply = "supply"\n', "")
    with pytest.raises(RoleMissing, match="off means supply off"):
        load(configs / "demo.toml")


def test_unmeasured_duty_needs_the_switch_delay(configs: Path, spoil: Spoil) -> None:
    """Where duty is not measured the switch's delay must be stated; where it is, it may be left out."""
    spoil("rigs/shelter-bench.toml", 'switch_delay = "1 us"\n', "")
    assert freeze(load(configs / "demo.toml")).switch_delay_s == 0.0
    spoil("rigs/shelter-bench.toml", 'duty = "scope.duty"\n', "")
    with pytest.raises(ConfigError, match="switch_delay: this must be stated, not assumed: duty is not measured"):
        load(configs / "demo.toml")


@pytest.mark.parametrize(("rate", "allowed"), [("40", True), ("41", False)])
def test_rate_leaves_the_heartbeat_50_ms(configs: Path, spoil: Spoil, rate: str, allowed: bool) -> None:
    """A served bench with a heartbeat of 2 s may run 40 times as fast, 41 times not (2 s / 40 = 50 ms)."""
    rig = configs / "rigs" / "shelter-bench.toml"
    spoil("rigs/shelter-bench.toml", 'name = "shelter bench"', f'name = "shelter bench"\nrate = {rate}')
    text = rig.read_text(encoding="utf-8").replace("simbench:board", "serial:/dev/pts/7")
    for port, name in enumerate(("supply", "meter", "scope"), 5001):
        text = text.replace(f"simbench:{name}", f"TCPIP0::127.0.0.1::{port}::SOCKET")
    rig.write_text(text, encoding="utf-8")
    refused: list[ConfigError] = []
    try:
        load(configs / "demo.toml")
    except ConfigError as error:
        refused.append(error)
    said = [str(error) for error in refused if "(allowed: up to 40)" in str(error)]
    assert (said == []) is allowed
    assert len(refused) == len(said)


def test_real_addresses_take_no_rate(configs: Path, spoil: Spoil) -> None:
    """A rate with an address on another machine is refused: nothing real runs faster."""
    rig = configs / "rigs" / "shelter-bench.toml"
    text = rig.read_text(encoding="utf-8").replace("simbench:board", "serial:/dev/serial/by-id/board")
    for port, name in enumerate(("supply", "meter", "scope"), 5001):
        text = text.replace(f"simbench:{name}", f"TCPIP0::192.0.2.1::{port}::SOCKET")
    rig.write_text(text, encoding="utf-8")
    assert not load(configs / "demo.toml").rig.in_process
    spoil("rigs/shelter-bench.toml", 'name = "shelter bench"', 'name = "shelter bench"\nrate = 20')
    with pytest.raises(ConfigError, match="nothing real runs faster"):
        load(configs / "demo.toml")


def test_simulated_rig_needs_a_simulated_motor(configs: Path) -> None:
    """Simulated instruments without a true motor to measure are refused."""
    motor = configs / "motors" / "aspirator-fan.toml"
    motor.write_text(motor.read_text(encoding="utf-8").split("[simulated]")[0], encoding="utf-8")
    with pytest.raises(ConfigError, match=r"motors.aspirator-fan\.toml, simulated: .*what the true motor is"):
        load(configs / "demo.toml")


@pytest.mark.parametrize("name", shipped_names())
def test_frozen_text_loads_to_an_equal_job(name: str, tmp_path: Path) -> None:
    """Every shipped job: its frozen text, alone in another folder, gives an equal job and the very same text again."""
    job = load(shipped(name))
    text = document(job)
    (tmp_path / "job.toml").write_text(text, encoding="utf-8", newline="\n")
    again = load(tmp_path / "job.toml")
    assert again == job
    assert document(again) == text
    assert freeze(again) == freeze(job)


def test_frozen_text_keeps_every_optional_key(configs: Path, spoil: Spoil) -> None:
    """Keys that no shipped file uses survive the frozen text too, floats to the last bit."""
    spoil("sweeps/evening.toml", "[settle]", "[deadline]\nuntil = 2026-03-02T06:00:00.5+01:00\n[settle]")
    spoil("sweeps/evening.toml", "points = 12", 'duties = ["100 %", "33.333333333333336 %", "0.1 %"]')
    spoil("motors/aspirator-fan.toml", "[simulated]", "[limits.turndown]\nat_least = 2.5\n[simulated]")
    spoil("motors/aspirator-fan.toml", 'load = "fan"', 'load = "fan"\nmaximum_temperature = "105.25 degC"')
    spoil("rigs/shelter-bench.toml", "[limits]", '[limits]\nheartbeat = "2000 ms"\ncase_temperature = "70 degC"')
    spoil("rigs/shelter-bench.toml", "[instruments.scope]", FAULTS)
    spoil("rigs/shelter-bench.toml", 'switch_delay = "1 us"', 'switch_delay = "1.23456789 us"\ndrive_step = "0.1 %"')
    spoil("demo.toml", "title", 'client = "Ä. Müller & \\"Söhne\\""\ncautions_acknowledged = true\ntitle')
    job = load(configs / "demo.toml")
    assert load_text(document(job)) == job
    assert job.rig.simulated == {"meter": {"latency": 0.02, "gain_error_percent": 0.3, "lost_replies": 2.0}}
    assert job.motor.limits["turndown"].at_least == 2.5


FAULTS = """[simulated.meter]
latency = "20 ms"
gain_error_percent = 0.3
lost_replies = 2
[instruments.scope]"""


def test_jobs_that_differ_are_not_equal(configs: Path, spoil: Spoil) -> None:
    """Equality looks at every part, and not at where the files lie."""
    one = load(configs / "demo.toml")
    assert one == load(shipped("demo"))
    assert one.rig_folder == configs / "rigs"
    spoil("motors/aspirator-fan.toml", 'maximum_current = "1.2 A"', 'maximum_current = "1.3 A"')
    assert one != load(configs / "demo.toml")
    assert one != "demo"


def test_job_can_be_sent_to_another_process(configs: Path) -> None:
    """A job survives pickling and deep copying, units of accuracy statements included."""
    job = load(configs / "demo.toml")
    for twin in (pickle.loads(pickle.dumps(job)), copy.deepcopy(job)):
        assert isinstance(twin, Job)
        assert twin == job
        assert document(twin) == document(job)


def test_inline_tables_point_into_the_job_file(configs: Path) -> None:
    """In a frozen job an error names the job file, its line, and the key with the part's name."""
    text = document(load(configs / "demo.toml")).replace('locked_rotor_time = "12 s"', 'locked_rotor_time = "12 A"')
    line = 1 + text[: text.index('"12 A"')].count("\n")
    with pytest.raises(ConfigError, match=rf"^job\.toml:{line}, rig\.limits\.locked_rotor_time: a time in s"):
        load_text(text)


def test_rig_text_is_a_rig_file(configs: Path) -> None:
    """A rig written as a file of its own is read back as the same rig."""
    job = load(configs / "demo.toml")
    (configs / "rigs" / "shelter-bench.toml").write_text(rig_document(job.rig), encoding="utf-8")
    assert load(configs / "demo.toml") == job


def test_hash_is_sha256_of_the_text() -> None:
    """The hash is SHA-256 (FIPS 180 example "abc": from memory); line ends count as LF."""
    assert job_hash("abc") == "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"
    assert job_hash("a\r\nb\n") == hashlib.sha256(b"a\nb\n").hexdigest()
    assert job_hash("a\nb\n") != job_hash("a\nc\n")


def test_deadline_in_hours_becomes_a_moment(configs: Path, spoil: Spoil) -> None:
    """Nine hours from 18:00 UTC is 03:00 UTC, in the plan and in the frozen text; without a start it is open."""
    spoil("sweeps/evening.toml", "[settle]", "[deadline]\nhours = 9\n[settle]")
    job = load(configs / "demo.toml")
    began = datetime(2026, 3, 1, 18, tzinfo=UTC).timestamp()
    ends = datetime(2026, 3, 2, 3, tzinfo=UTC)
    assert freeze(job).deadline_utc is None
    assert freeze(job).extra == {"deadline_hours": 9.0}
    assert freeze(job, began_utc=began).deadline_utc == ends.timestamp()
    fixed = with_deadline(job, began)
    assert freeze(fixed).deadline_utc == ends.timestamp()
    assert load_text(document(fixed)) == fixed
    assert with_deadline(fixed, began + 3600.0) == fixed


def test_limits_are_lowered_to_the_motors(configs: Path) -> None:
    """Protection gets the lower of rig and motor for each limit (figures from the two shipped files)."""
    limits = load(configs / "demo.toml").limits()
    assert (limits.current, limits.motor_voltage, limits.speed, limits.locked_rotor_time) == (1.2, 13.5, 5000.0, 12.0)
    assert limits.winding_temperature is None


def test_bounds_themselves_are_allowed(configs: Path, spoil: Spoil) -> None:
    """The motor's maximum voltage as supply, five time constants as hold time, the range's ends as PWM: all allowed."""
    spoil("sweeps/evening.toml", '["12 V"]', '["13.5 V"]')
    spoil("sweeps/evening.toml", 'hold_time = "20 s"', 'hold_time = "3 s"')
    spoil("sweeps/evening.toml", '"300 Hz", "1 kHz", "25 kHz"', '"20 Hz", "100 kHz"')
    job = load(configs / "demo.toml")
    assert (job.sweep.supply, job.sweep.pwm) == ((13.5,), (20.0, 100_000.0))


def test_motors_are_exchanged_by_one_line(configs: Path, spoil: Spoil) -> None:
    """The second fan that ships fits the first one's job, rig and sweep."""
    spoil("demo.toml", "motors/aspirator-fan.toml", "motors/aspirator-fan-b.toml")
    (configs / "motors" / "aspirator-fan-b.toml").write_bytes(shipped("motors/aspirator-fan-b").read_bytes())
    assert load(configs / "demo.toml").motor.name == "aspirating fan B"


def test_shipped_finds_jobs_and_parts() -> None:
    """Names with and without ending, parts by their folder; a wrong one is refused with the names there are."""
    assert shipped("demo") == shipped("demo.toml")
    assert shipped("rigs/shelter-bench").is_file()
    assert "demo" in shipped_names()
    assert "night" in shipped_names()
    with pytest.raises(
        ConfigError, match=r'no job of that name is shipped: demmo \(allowed: .*\)\. Did you mean "demo"'
    ):
        shipped("demmo")
    with pytest.raises(ConfigError, match="no job of that name is shipped"):
        shipped("../pyproject")


def test_files_may_be_whole_tables_in_one_text(configs: Path) -> None:
    """A job written by hand with its parts inline equals the one that names files."""
    parts = {
        name: tomllib.loads((configs / path).read_text(encoding="utf-8"))
        for name, path in tomllib.loads((configs / "demo.toml").read_text(encoding="utf-8")).items()
        if name != "title"
    }
    job = load(configs / "demo.toml")
    assert load_text(tomli_w.dumps({"title": job.title, **parts})) == job
