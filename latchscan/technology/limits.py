"""Limits and severities of the rules, one class a rule.

A rule that has a sensible limit for every process may be left out of the file; the others
must be given.
"""

from __future__ import annotations

from typing import Annotated, Literal, TypeAlias

from pydantic import Field, FiniteFloat

from latchscan.technology.quantities import Distance, DistanceOrZero, Fraction, Strict

Severity: TypeAlias = Literal["fail", "watch", "off"]
RingKind: TypeAlias = Literal["majority", "minority"]


class _Rule(Strict):
    source: str = ""
    """Where the limit is published or why it was chosen."""


class TapDistanceRule(_Rule):
    """Limits of the rule ``tap-distance``: any point of a diffusion to its body's tap."""

    severity: Severity = "fail"
    """What breaking the limit means; `off` leaves the rule out."""
    p_diffusion_max_um: Distance
    """p+ in an n-well to the nearest well tap [um]."""
    n_diffusion_max_um: Distance
    """n+ outside n-wells to the nearest substrate tap [um]."""


class UntiedBodyRule(_Rule):
    """Severity of the rule ``untied-body``: a well or substrate without a contacted tap."""

    severity: Severity = "fail"
    """What breaking the limit means; `off` leaves the rule out."""


class UncontactedTapRule(_Rule):
    """Severity of the rule ``uncontacted-tap``: a tap without a contact."""

    severity: Severity = "watch"
    """What breaking the limit means; `off` leaves the rule out."""


class TapReachRule(_Rule):
    """Limit of the rule ``tap-reach``: tap area beyond its last contact."""

    severity: Severity = "fail"
    """What breaking the limit means; `off` leaves the rule out."""
    max_um: Distance
    """Farthest point of a tap from its nearest contact [um]."""


class InjectorSpacingRule(_Rule):
    """Limit of the rule ``injector-spacing``: from an injector to the nearest foreign well."""

    severity: Severity = "fail"
    """What breaking the limit means; `off` leaves the rule out."""
    min_um: Distance
    """Smallest spacing allowed [um]."""


class WellResistanceRule(_Rule):
    """Limit of the rule ``well-resistance``: patch resistance of an emitter's well."""

    severity: Severity = "watch"
    """What breaking the limit means; `off` leaves the rule out."""
    max_ohm: Annotated[FiniteFloat, Field(gt=0, le=1.0e9)]
    """Largest patch resistance allowed [ohm]."""


class LoopGainRule(_Rule):
    """Limit of the rule ``loop-gain`` at the probe current."""

    severity: Severity = "fail"
    """What breaking the limit means; `off` leaves the rule out."""
    max_gain: Annotated[FiniteFloat, Field(gt=0, le=1.0e6)]
    """Largest loop gain allowed; a loop of gain 1 or more regenerates."""


class NetNamesRule(_Rule):
    """Severity of the rule ``net-names``: one net with several names, one name on several."""

    severity: Severity = "watch"
    """What breaking the limit means; `off` leaves the rule out."""


class TieNetRule(_Rule):
    """Severity of the rule ``tie-net``: a body tied to something that is not its rail."""

    severity: Severity = "fail"
    """What breaking the limit means; `off` leaves the rule out."""


class TieConflictRule(_Rule):
    """Severity of the rule ``tie-conflict``: one body tied to rails that differ."""

    severity: Severity = "fail"
    """What breaking the limit means; `off` leaves the rule out."""


class TieResistanceRule(_Rule):
    """Limit of the rule ``tie-resistance``: wiring between a body's taps and its rail."""

    severity: Severity = "fail"
    """What breaking the limit means; `off` leaves the rule out."""
    max_ohm: Annotated[FiniteFloat, Field(gt=0, le=1.0e9)] = 50.0
    """Largest resistance of straps and resistors between taps and rail allowed [ohm]."""


class ForwardBiasRule(_Rule):
    """Limit of the rule ``forward-bias``: a junction that the supplies themselves turn on."""

    severity: Severity = "fail"
    """What breaking the limit means; `off` leaves the rule out."""
    max_v: Annotated[FiniteFloat, Field(ge=0, le=1.0e3)] = 0.0
    """Largest forward voltage allowed across a junction within the supplies' ranges [V]."""


class WellSpacingRule(_Rule):
    """Limit of the rule ``well-spacing``: between n-wells at different potentials."""

    severity: Severity = "watch"
    """What breaking the limit means; `off` leaves the rule out."""
    min_um: Distance = 3.0
    """Smallest spacing of n-wells at different potentials allowed [um]."""


class IsolationGapRule(_Rule):
    """Severity of the rule ``isolation-gap``: an n-well ring that is open at one place."""

    severity: Severity = "fail"
    """What breaking the limit means; `off` leaves the rule out."""


class RingGapRule(_Rule):
    """Limit of the rule ``ring-gap``: openings of a guard ring."""

    severity: Severity = "fail"
    """What breaking the limit means; `off` leaves the rule out."""
    max_um: DistanceOrZero = 0.0
    """Widest opening of a ring allowed [um]; 0 asks for closed rings."""


class RingWidthRule(_Rule):
    """Limits of the rule ``ring-width``: the narrowest place of a guard ring."""

    severity: Severity = "watch"
    """What breaking the limit means; `off` leaves the rule out."""
    majority_min_um: DistanceOrZero = 0.5
    """Least width of a ring that collects majority carriers (a tap of its body) [um]."""
    minority_min_um: DistanceOrZero = 0.5
    """Least width of a ring that collects minority carriers (an n-well, a collector) [um]."""


class RingContactsRule(_Rule):
    """Limit of the rule ``ring-contacts``: how much of a guard ring is near a contact."""

    severity: Severity = "watch"
    """What breaking the limit means; `off` leaves the rule out."""
    min_share: Fraction = 0.5
    """Least share of the ring's area within `rings.contact_reach_um` of a contact."""


class RingNetRule(_Rule):
    """Severity of the rule ``ring-net``: a guard ring on a net that makes it useless."""

    severity: Severity = "fail"
    """What breaking the limit means; `off` leaves the rule out."""


class RingMissingRule(_Rule):
    """Rings that the rule ``ring-missing`` asks for around every injector."""

    severity: Severity = "watch"
    """What breaking the limit means; `off` leaves the rule out."""
    n_injector: tuple[RingKind, ...] = Field(default=("majority",), strict=False)
    """Kinds of closed rings to be found around an n+ injector; [] asks for none."""
    p_injector: tuple[RingKind, ...] = Field(default=("majority",), strict=False)
    """Kinds of closed rings to be found around a p+ injector; [] asks for none."""


class DoubleRingRule(_Rule):
    """Limits of the rule ``double-ring``: a p and an n strip between two halves of a thyristor."""

    severity: Severity = "watch"
    """What breaking the limit means; `off` leaves the rule out."""
    driver_within_um: Distance = 50.0
    """Farthest opposite diffusion of another pin that both strips must part from it [um]."""
    core_within_um: Distance = 50.0
    """Farthest opposite diffusion of no pin that both strips must part from it [um]."""


class Rules(Strict):
    """Limits and severities, one block a rule; the key is the rule's name."""

    tap_distance: TapDistanceRule = Field(alias="tap-distance")
    untied_body: UntiedBodyRule = Field(alias="untied-body", default_factory=UntiedBodyRule)
    uncontacted_tap: UncontactedTapRule = Field(
        alias="uncontacted-tap", default_factory=UncontactedTapRule
    )
    tap_reach: TapReachRule = Field(alias="tap-reach")
    injector_spacing: InjectorSpacingRule = Field(alias="injector-spacing")
    well_resistance: WellResistanceRule = Field(alias="well-resistance")
    loop_gain: LoopGainRule = Field(alias="loop-gain")
    net_names: NetNamesRule = Field(alias="net-names", default_factory=NetNamesRule)
    tie_net: TieNetRule = Field(alias="tie-net", default_factory=TieNetRule)
    tie_conflict: TieConflictRule = Field(alias="tie-conflict", default_factory=TieConflictRule)
    tie_resistance: TieResistanceRule = Field(
        alias="tie-resistance", default_factory=TieResistanceRule
    )
    forward_bias: ForwardBiasRule = Field(alias="forward-bias", default_factory=ForwardBiasRule)
    well_spacing: WellSpacingRule = Field(alias="well-spacing", default_factory=WellSpacingRule)
    isolation_gap: IsolationGapRule = Field(alias="isolation-gap", default_factory=IsolationGapRule)
    ring_gap: RingGapRule = Field(alias="ring-gap", default_factory=RingGapRule)
    ring_width: RingWidthRule = Field(alias="ring-width", default_factory=RingWidthRule)
    ring_contacts: RingContactsRule = Field(alias="ring-contacts", default_factory=RingContactsRule)
    ring_net: RingNetRule = Field(alias="ring-net", default_factory=RingNetRule)
    ring_missing: RingMissingRule = Field(alias="ring-missing", default_factory=RingMissingRule)
    double_ring: DoubleRingRule = Field(alias="double-ring", default_factory=DoubleRingRule)
