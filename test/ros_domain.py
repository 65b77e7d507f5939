"""Claims a ROS domain for one test process, so that runs beside each other never meet."""

from __future__ import annotations

import socket

DOMAINS = range(1, 102)
# Default port numbers of OMG DDSI-RTPS (PB 7400, DG 250, d0 0, d1 10, d2 1, d3 11): a domain's ports start at
# 7400 + 250 * domain, multicast takes offsets 0 and 1, participants those from 10 on. Up to domain 101 all lie below
# the ephemeral ports of Linux (docs.ros.org, "The ROS_DOMAIN_ID").
FIRST_PORT, PORTS_PER_DOMAIN, UNUSED_OFFSET, FIRST_PARTICIPANT = 7400, 250, 5, 10


def claim_domain(start: int) -> tuple[int, socket.socket]:
    """Return a domain id that no other test process has, and the socket that holds it until it is closed.

    Domains are tried from ``start`` on, round about. One in which some other program is taking part is passed over.
    """
    for step in range(len(DOMAINS)):
        domain = DOMAINS[(start + step) % len(DOMAINS)]
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
    raise RuntimeError("every ROS domain from 1 to 101 is in use on this machine")
