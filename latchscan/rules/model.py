"""What rules read (`Evidence`) and what they write (`Finding`)."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

from latchscan.layout.connections import Connections
from latchscan.layout.model import Box, Distances, Layout, Pairs, Spacings
from latchscan.parasitics.model import Resistances, Transfers
from latchscan.pnpn.model import Sites


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Evidence:
    """Every measure of a scan, as the rules see it."""

    layout: Layout
    distances: Distances
    spacings: Spacings
    resistances: Resistances
    pairs: Pairs
    transfers: Transfers
    sites: Sites
    connections: Connections


@dataclass(frozen=True, slots=True, kw_only=True)
class Finding:
    """One place a person should act on: neighbours that break one limit for one reason.

    Attributes
    ----------
    id
        ``tap-distance-1``; numbered within the rule, worst first.
    rule
        Name of the rule.
    severity
        ``fail`` or ``watch``.
    subject
        Id of the worst member (an emitter, tap, body, site, net or ring) or name of a pin.
    body
        Id of the body it concerns, "" where there is none.
    x_um, y_um
        Where the worst member breaks the limit.
    measured, limit
        The worst measure and the limit it breaks [unit].
    unit
        ``um``, ``ohm``, ``V``, ``1``; the unit of both.
    message
        One sentence for a person: what is wrong, where, what would mend it.
    count
        Number of members.
    box_um
        Box around all members.
    """

    id: str
    rule: str
    severity: Literal["fail", "watch"]
    subject: str
    body: str
    x_um: float
    y_um: float
    measured: float
    limit: float
    unit: str
    message: str
    count: int
    box_um: Box
