"""The link contract, the same tests on a real TCP connection, a real pseudo-terminal and an in-process port."""

from __future__ import annotations

import pytest

from sweeprig.errors import LinkGarbled, LinkLost, LinkMisuse
from sweeprig.link.link import LARGEST_LINE, Link
from sweeprig.roles import Reply

