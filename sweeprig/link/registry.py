"""Names to classes, imported on first use: kinds of links by the form of the address, adapters by entry points.

Nothing here is replaced silently: a name that two packages claim is an error.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from importlib import import_module
from importlib.metadata import EntryPoint, entry_points
from typing import TYPE_CHECKING, Any

from sweeprig.clock import Clock
from sweeprig.errors import ConfigError, MissingPackage, UnknownAdapter
from sweeprig.link.link import Link

if TYPE_CHECKING:
    from sweeprig.link.inprocess import BytePort

GROUP = "sweeprig.adapters"

# beginning of the address (a pattern) → its form for people, and the class
_KINDS: dict[str, tuple[str, str]] = {
    r"TCPIP\d*::.*::SOCKET$": ("TCPIP0::host::port::SOCKET", "sweeprig.link.tcp:TcpLink"),
    r"serial:": ("serial:PORT", "sweeprig.link.serial_port:SerialLink"),
    r"simbench:": ("simbench:NAME", "sweeprig.link.inprocess:InProcessLink"),
}

# modules whose package has another name
_PACKAGE_OF = {"serial": "pyserial", "usb": "pyusb"}


def open_link(
    address: str,
    clock: Clock,
    deadline: float,
    *,
    ports: Mapping[str, BytePort] | None = None,
    terminator: bytes = b"\n",
) -> Link:
    """An open, clean, unidentified link to `address` by `deadline` (absolute, the clock's seconds).

    ports        far ends of `simbench:NAME` addresses, by NAME; only the simulated bench gives them
    terminator   ends every message sent; replies may end with LF, CR LF or CR whatever it is

    UnknownAdapter for a kind of address that is not known, ConfigError for one that is malformed or a NAME without a
    port, MissingPackage where the kind needs a package that is not installed, LinkLost where it cannot be opened.
    """
    if not terminator:
        raise ConfigError("a message needs a terminator", value="none", allowed=r"for example \n or \r\n")
    form, spec = _kind_of(address)
    kind = _load_kind(form, spec)
    if form.startswith("simbench:"):
        link = kind(address, clock, terminator, _port(address, ports))
    else:
        link = kind(address, clock, terminator)
    link.open(deadline)
    opened: Link = link
    return opened


def find_adapter(name: str) -> type:
    """The adapter class registered under `name`.

    UnknownAdapter lists those known; MissingPackage gives the reason and the install command; ConfigError if any name
    is registered twice.
    """
    known = _entry_points()
    if name not in known:
        raise UnknownAdapter(
            "no adapter of this name",
            value=name,
            allowed=", ".join(sorted(known)) or "none is installed",
            remedy="Correct the name, or install the package that brings it",
            topic="adapters",
        )
    return _load_adapter(known[name])


def adapters() -> dict[str, str]:
    """Every registered adapter: name → why it cannot be used, or "" if it can. ConfigError for a name used twice."""
    found: dict[str, str] = {}
    for name, entry in sorted(_entry_points().items()):
        try:
            _load_adapter(entry)
        except MissingPackage as error:
            found[name] = str(error)
        else:
            found[name] = ""
    return found


def _kind_of(address: str) -> tuple[str, str]:
    for pattern, kind in _KINDS.items():
        if re.match(pattern, address.strip(), re.IGNORECASE):
            return kind
    raise UnknownAdapter(
        "no kind of link takes this address",
        value=address,
        allowed=", ".join(form for form, _ in _KINDS.values()),
        topic="links",
    )


def _load_kind(form: str, spec: str) -> Any:
    module, _, name = spec.partition(":")
    try:
        return getattr(import_module(module), name)
    except ImportError as error:
        raise MissingPackage(
            f"links of the form {form} need a package that cannot be imported",
            value=str(error),
            remedy=_install(error, "sweeprig", spec),
            topic="links",
        ) from error


def _port(address: str, ports: Mapping[str, BytePort] | None) -> BytePort:
    name = address.strip().partition(":")[2]
    known = {} if ports is None else ports
    if name not in known:
        raise ConfigError(
            "the simulated bench has no instrument of this name",
            value=address,
            allowed=", ".join(f"simbench:{each}" for each in sorted(known)) or "none, as no simulated bench runs here",
            topic="links",
        )
    return known[name]


def _entry_points() -> dict[str, EntryPoint]:
    found: dict[str, EntryPoint] = {}
    for entry in entry_points(group=GROUP):
        if entry.name in found:
            raise ConfigError(
                f"two adapters are named {entry.name}",
                value=f"{_origin(found[entry.name])} and {_origin(entry)}",
                remedy="Uninstall one of the packages: which of the two is meant cannot be guessed",
                topic="adapters",
            )
        found[entry.name] = entry
    return found


def _load_adapter(entry: EntryPoint) -> type:
    try:
        loaded = entry.load()
    except Exception as error:  # whatever its module does at import, the others stay usable
        raise MissingPackage(
            f"the adapter {entry.name} is registered, but cannot be imported from {entry.value}",
            value=f"{type(error).__name__}: {error}",
            remedy=_install(error, _package(entry), entry.module),
            topic="adapters",
        ) from error
    if not isinstance(loaded, type):
        raise MissingPackage(
            f"the adapter {entry.name} is registered as {entry.value}, which is no class",
            remedy=_install(None, _package(entry), entry.module),
            topic="adapters",
        )
    return loaded


def _install(error: Exception | None, package: str, module: str) -> str:
    """The command that helps: the package that `module` misses, or the one that brought `module`, anew."""
    missing = error.name if isinstance(error, ModuleNotFoundError) else None
    top = (missing or "").partition(".")[0]
    if top and top != module.partition(".")[0]:
        return f"pip install {_PACKAGE_OF.get(top, top)}"
    return f"pip install --force-reinstall {package}"


def _package(entry: EntryPoint) -> str:
    return "sweeprig" if entry.dist is None else entry.dist.name


def _origin(entry: EntryPoint) -> str:
    return f"{entry.value} of {_package(entry)}"
