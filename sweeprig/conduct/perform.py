"""Performing one hold: the lead, the step to the target, cycles of readings until it ended.

What goes wrong is raised: `Spoiled` for a hold that says nothing (it is discarded and asked for again), and the causes
of `watchman`. The loop in `run` turns them into outcomes.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, field

from sweeprig.conduct import by_taps, kick
from sweeprig.conduct.as_set import changed, restarted
from sweeprig.conduct.bounds import BOUNDS
from sweeprig.conduct.doubting import Doubting, Spoiled
from sweeprig.conduct.last_part import last_part, steady_speed
from sweeprig.conduct.means import means_of, settled_means, settling_flags
from sweeprig.conduct.protection import Commanded
from sweeprig.conduct.rig import OpenRig, by_channel, value_of
from sweeprig.conduct.rotation import CONTRADICTED
from sweeprig.conduct.settle import LEAST_READINGS, Settling, Wanted
from sweeprig.conduct.switch_off import drive_off, still_on
from sweeprig.conduct.track import Track
from sweeprig.conduct.watchman import Watchman
from sweeprig.holds import Approach, Condition, Hold, Purpose, Verdict
from sweeprig.plan import Plan
from sweeprig.quantities import Reading
from sweeprig.roles import ACTUATORS, SupplySetting, Window


@dataclass(slots=True)
class Performed:
    """What a hold gave so far; kept while it goes on, so that a broken hold still leaves its readings on record."""

    readings: list[Reading] = field(default_factory=list)
    verdict: Verdict = Verdict.UNDECIDED
    exposed_s: float = 0.0
    event_between_s: tuple[float, float | None] = (0.0, None)
    restarts: int = 0
    means: dict[str, Reading] = field(default_factory=dict)
    flags: tuple[str, ...] = ()


class Performer:
    """Performs holds on one open rig."""

    def __init__(self, rig: OpenRig, plan: Plan, watch: Watchman, beat: Callable[[int], None]) -> None:
        self.rig = rig
        self.plan = plan
        self.watch = watch
        self.beat = beat
        self.supply_v: float | None = None
        self.supply_set: dict[str, str] = {}
        self.doubting = Doubting(rig, plan.current_at)
        self.settling = Settling()
        self._track: Track | None = None
        self.told = by_taps.Told()
        self.changed = (0.0, 0.0)
        """Between these moments of the run clock the motor's power was last changed; telling a duty took `apply_s`."""
        self.apply_s = 0.0

    # -- the drive and the supply --------------------------------------------------------------------------------

    def power(self, condition: Condition) -> None:
        """Supply at the condition's voltage, its current limit set and read back."""
        supply = self.rig.supply
        if supply is None:
            self._commanded(condition.supply_v)  # nobody here sets it: it is always on
        if supply is None or self.supply_v == condition.supply_v:
            return
        if self.rig.guard.on:
            self.off()
        name, limits = self.rig.source["supply"], self.rig.use.limits
        self.rig.tell(name, supply.apply(SupplySetting(condition.supply_v, limits.current)), self.watch.look)
        if not self.rig.off_is_supply_off:
            self._supply_on()
            self._commanded(condition.supply_v)
        self.supply_v = condition.supply_v

    def _commanded(self, supply_v: float | None) -> None:
        """What protection compares the readings with, while the drive is off."""
        if self.rig.guard.commanded.supply_v != supply_v:
            self.doubting.command(Commanded(False, 0.0, 0.0, supply_v, self.rig.clock.now()))

    def _supply_on(self) -> None:
        supply = self.rig.supply
        if supply is not None:
            name = self.rig.source["supply"]
            self.rig.tell(name, supply.switch_on(), self.watch.look)
            self.supply_set = self.rig.tell(name, supply.settings(), self.watch.look)

    def off(self) -> None:
        """The drive off between holds; with a control input the supply, which keeps its voltage and limit."""
        drive_off(self.rig)
        if self.rig.off_is_supply_off:
            self.supply_set = {}

    def unpowered(self) -> None:
        """The supply was told to be off: what it was set to holds no more."""
        self.supply_v, self.supply_set = None, {}
        self._commanded(None)

    def apply(self, condition: Condition, duty_percent: float, done: Performed) -> None:
        rig, drive, name = self.rig, self.rig.drive, self.rig.source["drive"]
        # From here on the rotor must be seen turning: the ages count before the first edge of power.
        was_on = rig.guard.on
        if not was_on:
            self.still_set((name,))  # a board that restarted at rest has lost its heartbeat setting
        now = rig.clock.now()
        rig.guard.drive_on(now)
        setting, commanded = self.told.settings(condition, duty_percent, now)
        self.doubting.command(commanded)
        asked = rig.clock.now()
        set_values = rig.tell(name, drive.apply(setting), self.watch.look)
        self.changed = asked, rig.clock.now()
        self.apply_s = self.changed[1] - asked
        if not was_on:
            # Never "on" again on a drive that should be on: that would hide a lapse of its heartbeat.
            rig.tell(name, drive.switch_on(), self.watch.look)
            if rig.off_is_supply_off:
                self._supply_on()  # last: the input says the duty before the fan can run
            self.changed = self.changed[1], rig.clock.now()
        done.readings.extend(set_values.values())
        done.means.update(by_channel(set_values))

    def cycle(self, names: tuple[str, ...], window_s: float, hold: Hold, done: Performed) -> dict[str, Reading]:
        readings = self.rig.read(names, Window(window_s, hold.condition.pwm_hz), self.watch.look)
        self.watch.look()
        done.readings.extend(readings.values())
        self.beat(hold.number)
        for jump in self.doubting.take(readings, done.readings):
            if self._track is not None and jump.value is not None:
                self._track.forget(jump.value)
        return readings

    # -- one hold ------------------------------------------------------------------------------------------------

    def perform(self, hold: Hold, done: Performed) -> None:
        """Fill `done`. The rotor's verdict decides whether the drive stays on: after a stop it goes off at once."""
        self.told.begin(hold)
        unseen = self.supply_v is None and not self.rig.off_is_supply_off
        self.power(hold.condition)
        if unseen and hold.purpose not in (Purpose.ZERO, Purpose.REST):
            self._look_off(hold, done)
        pulse: kick.Pulse | None = None
        for duty, seconds in hold.lead:
            if duty == 0:
                self._rest(hold, seconds, done)
            elif hold.purpose is Purpose.KICK:
                pulse = kick.begin(self, hold, duty, seconds, done)
            else:
                self._turn_at(hold, duty, seconds, done)
        # A control input at duty 0 is a setting like any other: some fans turn there.
        unpowered = hold.duty_percent == 0 and not self.rig.off_is_supply_off
        if unpowered or hold.purpose in (Purpose.ZERO, Purpose.REST):
            self._stay_off(hold, done)
        elif hold.purpose is Purpose.CURVE:
            self._settle(hold, done)
        elif hold.purpose is Purpose.START:
            self._start(hold, done)
        else:
            self._expose(hold, done)
        if hold.purpose is Purpose.KICK:
            kick.conclude(done, pulse, self.changed)

    def _look_off(self, hold: Hold, done: Performed) -> None:
        """The first hold after the rig was healed: off was proved with the supply off too, where a switch that failed
        short meanwhile does not show. So everything must say off with the supply on, before the drive is used."""
        names = self.rig.serving(("motor_voltage", "current", "supply"))
        until = self.rig.clock.now() + BOUNDS["look_off_s"]
        wrong = ["nothing was read"]
        while self.rig.clock.now() < until:
            wrong = still_on(self.rig, self.cycle(names, BOUNDS["cycle_window_s"], hold, done))
        if wrong:
            self.unpowered()  # the next hold looks again
            raise Spoiled(f"with the supply on again and the drive off, {'; '.join(wrong)}")

    def track(self) -> Track:
        tacho = self.rig.source["speed"]
        per_revolution = self.rig.use.pulses_per_revolution
        self._track = Track(
            self.rig.roles["speed"], f"{tacho}.edge_age", f"{tacho}.edge_gap", per_revolution, self.rig.clock.now()
        )
        return self._track

    def _rest(self, hold: Hold, seconds: float, done: Performed) -> None:
        """Drive off until no edge came for `seconds`."""
        self.off()
        clock, age = self.rig.clock, self.rig.rotation_channel
        until = clock.now() + seconds + BOUNDS["coast_s"]
        began = clock.now()
        names: tuple[str, ...] = (self.rig.source["speed"],)
        wait_s = BOUNDS["cycle_window_s"]
        while True:
            reading = self.cycle(names, wait_s, hold, done)[age]
            still_s = min(math.inf if reading.value is None else reading.value, reading.at - began)
            if still_s >= seconds:
                return
            if clock.now() >= until:
                raise Spoiled(f"the rotor did not come to rest within {BOUNDS['coast_s']:g} s with the drive off")
            if still_s < BOUNDS["least_gap_s"] and clock.now() - began >= BOUNDS["coast_suspect_s"]:
                names = (self.rig.source["speed"], *self._guarded())  # protection sees a switch that failed short
            wait_s = min(max(seconds - still_s, BOUNDS["cycle_window_s"]), BOUNDS["trial_window_s"])

    def _turn_at(self, hold: Hold, duty: float, seconds: float, done: Performed) -> None:
        """The relaunch: turning at `duty` for `seconds`, and seen to turn at its end."""
        self.apply(hold.condition, duty, done)
        clock, track = self.rig.clock, self.track()
        until = track.began + seconds
        names = (self.rig.source["speed"], *self._guarded())
        while clock.now() < until:
            track.take(self.cycle(names, min(BOUNDS["trial_window_s"], seconds), hold, done))
        if not track.turning():
            self.still_driven()
            self.off()
            raise Spoiled(f"the rotor did not turn after {seconds:g} s at {duty:g} %")

    def _read_in(self, hold: Hold) -> tuple[str, ...]:
        """Instruments read while the drive is on. The supply is one of them, last: when it leaves its voltage for a
        second, what the motor does is nothing but scatter unless the supply is read."""
        names = self.rig.serving(hold.roles)
        return tuple(dict.fromkeys((*names, *(name for role, name in self.rig.source.items() if role == "supply"))))

    def _guarded(self) -> tuple[str, ...]:
        names = dict.fromkeys(channel.partition(".")[0] for channel in self.rig.guard.channels())
        names.pop(self.rig.source["speed"], None)
        return tuple(names)

    def _stay_off(self, hold: Hold, done: Performed) -> None:
        """Zero check and rest: everything must say off, all the time."""
        if self.rig.guard.on:
            self.off()
        clock, names = self.rig.clock, self.rig.serving((*hold.roles, "supply"))
        began = clock.now()
        cycles = []
        window_s = BOUNDS["trial_window_s" if hold.purpose is Purpose.REST else "cycle_window_s"]
        while clock.now() - began < hold.most_s:
            readings = self.cycle(names, window_s, hold, done)
            cycles.append(readings)
            wrong = still_on(self.rig, readings)
            if wrong:
                for _ in range(int(BOUNDS["short_readings"])):  # protection sees a switch that failed short
                    self.cycle(names, window_s, hold, done)
                raise Spoiled(f"with the drive off, {'; '.join(wrong)}")
        done.verdict = Verdict.STOPPED
        done.exposed_s = clock.now() - began
        done.means.update(means_of(cycles))

    def _settle(self, hold: Hold, done: Performed) -> None:
        """A curve point: cycles until the speed has settled to the tolerance, or plainly will not, or a stop."""
        asked = self.plan.settle
        window_s, before = BOUNDS["cycle_window_s"], self._speed_before()
        wanted = Wanted(asked.tolerance_percent, asked.confidence_percent, hold.most_s, window_s, before)
        self.apply(hold.condition, hold.duty_percent, done)
        clock, track, names = self.rig.clock, self.track(), self._read_in(hold)
        speed, cycles = self.rig.roles["speed"], list[dict[str, Reading]]()
        while True:
            readings = self.cycle(names, window_s, hold, done)
            track.take(readings)
            exposed = clock.now() - track.began
            if track.stopped_at is not None or (exposed >= hold.least_s and not track.turning()):
                self._stopped(track, exposed, done)
                return
            if not track.turning():
                continue
            cycles.append(readings)
            last = exposed >= hold.most_s
            if exposed < hold.least_s:
                continue
            # The window of the first speed may have begun before the setting was applied
            speeds = [(at - track.began, rpm) for at, rpm in track.speeds[1:]]
            found = self.settling.look(speeds, readings[speed].u, wanted, last)
            if last or (found is not None and (found.decided or found.hopeless)):
                self._turning(track, exposed, done)
                since = track.began if found is None else track.speeds[1 + found.first][0]
                done.means.update(settled_means(cycles, since, speed, found))
                done.flags = (*done.flags, *settling_flags(found))
                return

    def _speed_before(self) -> float | None:
        """The speed as a hold begins, rpm, where it is known: the rotor was driven until now, or was seen to be at rest
        with nothing to move it since."""
        track = self._track
        if track is None:
            return None
        if self.rig.guard.on:
            return track.speeds[-1][1] if track.speeds and track.turning() else None
        return None if track.turning() else 0.0

    def _expose(self, hold: Hold, done: Performed) -> None:
        """A stall trial, the run-in, a reference: exposed for the hold time whatever settling says; a stop ends it."""
        self.apply(hold.condition, hold.duty_percent, done)
        clock, track, names = self.rig.clock, self.track(), self._read_in(hold)
        from_rest = hold.approach is Approach.FROM_REST
        grace = 5.0 * self.plan.time_constant_s
        cycles: list[dict[str, Reading]] = []
        while True:
            left = hold.most_s - (clock.now() - track.began)
            window_s = max(min(BOUNDS["trial_window_s"], left), BOUNDS["cycle_window_s"])
            readings = self.cycle(names, window_s, hold, done)
            track.take(readings)
            now = clock.now()
            exposed = now - track.began
            at_rest = not track.turning() and not (from_rest and exposed < grace)
            if track.stopped_at is not None or at_rest:
                self._stopped(track, exposed, done)
                done.means.update(means_of(cycles[:-1]))
                break
            if exposed - window_s >= grace:
                cycles.append(readings)
            if exposed >= hold.most_s:
                self._turning(track, exposed, done)
                counted = last_part(hold, cycles)
                done.means.update(means_of(counted) | steady_speed(hold, counted, self.rig.roles["speed"]))
                break
        if hold.purpose is Purpose.RUN_IN and done.verdict is Verdict.STOPPED:
            raise Spoiled(f"the rotor stopped or did not start at {hold.duty_percent:g} % in the run-in")

    def _start(self, hold: Hold, done: Performed) -> None:
        """From rest, full step; ten whole revolutions within the start time and still turning at its end."""
        self.apply(hold.condition, hold.duty_percent, done)
        clock, track, names = self.rig.clock, self.track(), self._read_in(hold)
        cycles: list[dict[str, Reading]] = []
        while (left := hold.most_s - (clock.now() - track.began)) > 0:
            window_s = max(min(BOUNDS["cycle_window_s"], left), 0.25)
            cycles.append(self.cycle(names, window_s, hold, done))
            track.take(cycles[-1])
        now = clock.now()
        started = track.turning() and track.revolutions >= BOUNDS["start_revolutions"]
        done.verdict = Verdict.STARTED if started else Verdict.DID_NOT_START
        done.exposed_s, done.restarts = now - track.began, track.restarts
        done.event_between_s = (done.exposed_s, None)
        done.means.update(means_of(cycles[-2:]))
        if started:
            self._doubt_turning(done)
        else:
            self.still_driven()
            if not track.turning():
                self.doubting.believe_rest()
            self.off()
            if track.revolutions > 0:
                done.flags = (*done.flags, "twitched")

    # -- how it ended --------------------------------------------------------------------------------------------

    def still_driven(self) -> None:
        """What a stop of the rotor is asked first: drive and supply are as they were set (see `still_set`)."""
        self.still_set(tuple({self.rig.source[role]: None for role in ACTUATORS if role in self.rig.source}))

    def still_set(self, names: tuple[str, ...]) -> None:
        """Ask `names`, side by side, whether they are as they were set. InstrumentRefused for one that restarted or was
        turned by hand: its settings are lost. Spoiled for a drive that is off by itself (its heartbeat lapsed)."""
        rig = self.rig
        found = rig.ask({name: rig.adapters[name].settings() for name in names}, BOUNDS["exchange_s"], self.watch.look)
        settings = {name: value_of(name, result) for name, result in found.items()}
        for name, now in settings.items():
            restarted(name, now)
            if name == rig.source.get("supply"):
                changed(name, self.supply_set, now)
            elif name != rig.source["drive"]:
                changed(name, rig.settings[name], now)
        drive = settings.get(rig.source["drive"], {})
        if rig.guard.on and drive.get("output", "1") in ("0", "OFF"):
            raise Spoiled("heartbeat: the drive switched itself off during the hold, the host was silent for too long")

    def _stopped(self, track: Track, exposed: float, done: Performed) -> None:
        self.still_driven()
        self.doubting.believe_rest()
        self.off()
        done.verdict, done.exposed_s, done.restarts = Verdict.STOPPED, exposed, track.restarts
        if track.stopped_at is None:
            # It stopped (or stayed at rest) before a speed could be told: known up to the last edge only.
            done.event_between_s = (max(track.last_edge - track.began, 0.0), exposed)
            return
        good, missing = track.stopped_at
        done.event_between_s = (max(good - track.began, 0.0), max(missing - track.began, 0.0))
        if track.restarts:
            done.flags = (*done.flags, "self_restart")

    def _turning(self, track: Track, exposed: float, done: Performed) -> None:
        """Still turning: known up to the last edge seen, not up to the moment of asking."""
        done.exposed_s = exposed
        done.event_between_s = (max(min(track.last_edge - track.began, exposed), 0.0), None)
        done.restarts = track.restarts
        last = [speed for _, speed in track.speeds[-LEAST_READINGS:]]
        slow = not last or sum(last) / len(last) < self.plan.lowest_rpm
        done.verdict = Verdict.UNDECIDED if slow else Verdict.TURNING
        if slow:
            done.flags = (*done.flags, "below_lowest_speed")
        self._doubt_turning(done)

    def _doubt_turning(self, done: Performed) -> None:
        """Do voltage and current contradict it? Then no survival, no start; and off, for the rotor may be locked."""
        if self.doubting.stands():
            done.verdict, done.event_between_s = Verdict.UNDECIDED, (0.0, None)
            done.flags = (*done.flags, CONTRADICTED)
            self.off()
