"""What a run remembers of its serial ports: names that lead to the same adapter when it has another number.

One link remembers that by itself (`link.serial_port`); this is for the processes that come after it.
"""

from __future__ import annotations

from sweeprig.job import Job


def with_stable_ports(job: Job) -> Job:
    """Serial ports by their stable names: a run outlives its processes, and the node that one of them opened may be
    another device's when the next one comes, or when the supervisor switches off."""
    instruments = dict(job.rig.instruments)
    for name, one in instruments.items():
        if one.address.lower().startswith("serial:"):
            from sweeprig.link.serial_port import stable_address  # needs the serial library, which not every rig does

            instruments[name] = one.model_copy(update={"address": stable_address(one.address)})
    return job.model_copy(update={"rig": job.rig.model_copy(update={"instruments": instruments})})
