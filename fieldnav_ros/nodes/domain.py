"""A ROS domain of one program's own on this machine: a simulated robot's commands must not reach a real one."""

from __future__ import annotations

import os
import random
import socket
import sys

from fieldnav_ros.errors import WorkError

DOMAINS = range(1, 102)
# Default port numbers of OMG DDSI-RTPS (PB 7400, DG 250, d0 0, d1 10, d2 1, d3 11): a domain's ports start at
# 7400 + 250 * domain, multicast takes offsets 0 and 1, participants those from 10 on. Up to domain 101 all lie below
# the ephemeral ports of Linux (docs.ros.org, "The ROS_DOMAIN_ID").
FIRST_PORT, PORTS_PER_DOMAIN, UNUSED_OFFSET, FIRST_PARTICIPANT = 7400, 250, 5, 10


def claim_domain(start: int, avoid: int | None = None) -> tuple[int, socket.socket]:
    """Return a domain id that no other program here has claimed, and the socket that holds it until it is closed.

    Domains are tried from ``start`` on, round about, but for ``avoid``. One in which some other program is taking
    part is passed over. WorkError where none is left.
    """
    for step in range(len(DOMAINS)):
        domain = DOMAINS[(start + step) % len(DOMAINS)]
        if domain == avoid:
            continue
        first = FIRST_PORT + PORTS_PER_DOMAIN * domain
        claim = socket.socket(socket.AF_INET, socket.SOCK_STREAM)
        try:
            claim.bind(("127.0.0.1", first + UNUSED_OFFSET))
            with socket.socket(socket.AF_INET, socket.SOCK_DGRAM) as probe:
                probe.bind(("", first + FIRST_PARTICIPANT))
        except OSError:
            claim.close()
        else:
            return domain, claim
    raise WorkError(f"every ROS domain from {DOMAINS[0]} to {DOMAINS[-1]} is in use on this machine")


class Domain:
    """A ROS domain of this machine alone, held for as long as this object lives; never the one the user works in."""

    def __init__(self) -> None:
        used = os.environ.get("ROS_DOMAIN_ID", "")
        start = random.SystemRandom().randrange(len(DOMAINS))
        self.number, self._claim = claim_domain(start, int(used) if used.isdecimal() else None)

    def enter(self) -> None:
        """Keep this process, and those that it starts from now on, to this domain and this machine."""
        os.environ.update(ROS_DOMAIN_ID=str(self.number), ROS_AUTOMATIC_DISCOVERY_RANGE="LOCALHOST")
        if not os.environ.get("AMENT_PREFIX_PATH"):
            os.environ["AMENT_PREFIX_PATH"] = sys.prefix
