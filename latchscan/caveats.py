"""The one registry of cautions that a result can carry.

A caveat has a short code (stable, for machines) and a sentence (for people).  Stages of
the pipeline raise caveats by code; reports print the sentence.
"""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True, kw_only=True, order=True)
class Caveat:
    """A caution attached to a result.

    Attributes
    ----------
    code
        Key of `SENTENCES`.
    detail
        What it concerns here: a count, a layer, a key of the technology file; may be empty.
    """

    code: str
    detail: str = ""

    def __post_init__(self) -> None:
        if self.code not in SENTENCES:
            raise KeyError(self.code)

    @property
    def sentence(self) -> str:
        """The caution as one sentence, detail included."""
        base = SENTENCES[self.code]
        return f"{base} ({self.detail})" if self.detail else base


SENTENCES: dict[str, str] = {
    "estimate": (
        "All results are estimates; sign-off stays with the foundry's rules, the qualification"
        " test and licensed practice"
    ),
    "lateral-gain-closed-form": (
        "The lateral NPN gain is a closed form of the spacing, not a solved carrier field;"
        " published gains of this kind are rare and the band is about a factor of 3"
    ),
    "assumed-number": "The technology file marks this number as an assumption",
    "unnamed-layer": "The layout holds a layer that the technology does not name; it was ignored",
    "absent-layer": "Layers that a role is derived from are absent from the layout",
    "flat-shapes": "Shapes without area in the layout were left out",
    "passed-over-cell": "A top cell without any technology layer was passed over",
    "uncontacted-taps": "Taps without a contact do not count as taps",
    "untied-body": "A body has no contacted tap; its resistance is unbounded",
    "resistance-error": "Some resistances have an error estimate above 5 percent",
    "unsolved": "Some emitters have no trustworthy resistance and count as not passed",
    "substrate-window": "Substrate current beyond the solved window is neglected",
    "no-injectors": "No injector is declared by a marker layer or reached from a pin",
    "window": "Only a window of the layout was scanned; bodies are cut at its edge",
    "no-conductors": (
        "The technology names no conductors; no shape is followed beyond its own layer, and"
        " nets, ties and rings are not judged"
    ),
    "no-supplies": "No net is known as a supply or a ground; ties of bodies are not judged",
    "assumed-supply": "Supplies and grounds were taken from their names, their voltage assumed",
    "assumed-pins": "Every other name was taken for a signal pin with a test current of 100 mA",
    "local-names": "Names on many separate nets were taken for local names of placed cells",
    "label-on-nothing": "A label lies on no shape and names nothing",
    "unnamed-pad": "A bond pad without a name was taken for a signal pin",
    "pad-on-nothing": "A bond pad lies on no conductor and is no pin",
    "nets-whole-block": (
        "Nets and pins are those of the whole block; bodies, ties and injectors only those of"
        " the window"
    ),
    "nets-too-many": (
        "The whole block is too large for its nets to be traced; nets, ties and pins are not judged"
    ),
    "left-out": "A part of the layout was left out, as the block file says",
}
