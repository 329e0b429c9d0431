"""What became of each body, and what its facets were taken to mean, as text and in `result.json`."""

from collections.abc import Sequence
from dataclasses import asdict
from math import degrees
from typing import Any

from daraf.bem.solution import BodyAccount

__all__ = ["account_document", "account_text", "counted", "facet_columns"]

#: Smallest relative change of area or volume that is worth a word: rounding of single-precision files lies below.
WORTH_TELLING = 1e-5
#: Most bodies listed behind the tables; the rest stands in the log.
MOST_BODIES = 12
#: Longer names of bodies are cut.
NAME_WIDTH = 24


def counted(n: int, one: str, many: str = "") -> str:
    """Count with its noun.

    Examples
    --------
    >>> counted(1, "body", "bodies"), counted(2, "body", "bodies"), counted(0, "panel")
    ('1 body', '2 bodies', '0 panels')
    """
    return f"{n} {one if n == 1 else many or one + 's'}"


def account_document(accounts: Sequence[BodyAccount]) -> list[dict[str, Any]]:
    """Put the accounts into the form of `result.json`; angles in rad."""
    return [
        {key: list(value) if isinstance(value, tuple) else value for key, value in asdict(one).items()}
        for one in accounts
    ]


def account_text(one: BodyAccount) -> str:
    """One line for one body.

    Parameters
    ----------
    one : BodyAccount

    Returns
    -------
    str
        Such as "ring: 96 triangles, 50 flat faces, 50 panels; round: 48 faces that turn by 7.5 deg".
    """
    slivers = f" ({counted(one.slivers, 'sliver')} among them)" if one.slivers else ""
    text = f"{one.body}: {counted(one.triangles, 'triangle')}{slivers}, {counted(one.faces, 'flat face')}, "
    text += counted(one.panels, "panel")
    changes = [("area", one.area_change), ("volume", one.volume_change)]
    text += "".join(
        f", {what} changed by {change:+.1e}"
        for what, change in changes
        if change is not None and abs(change) > WORTH_TELLING
    )
    said = _assumed(one)
    return f"{text}; {said}" if said else text


def _assumed(one: BodyAccount) -> str:
    """What was taken as round, or nothing."""
    words = []
    if one.round_faces:
        words.append(f"{one.round_faces} of {counted(one.faces, 'face')}")
    rims = ((one.round_outline, "edges of outlines"), (one.round_holes, "edges of holes"))
    words += [f"{n} {what}" for n, what in rims if n]
    return f"taken as round: {', '.join(words)}, turning by {_angles(one)}" if words else ""


def _angles(one: BodyAccount) -> str:
    """Least and greatest turn of all that was taken as round, in degrees."""
    values = [value for pair in (one.turn, one.rim_turn) if pair is not None for value in pair]
    low, high = (f"{degrees(value):.2g}" for value in (min(values), max(values)))
    return f"{low} deg" if low == high else f"{low} to {high} deg"


def facet_columns(document: dict[str, Any]) -> dict[str, list[str]]:
    """Columns, by head, that say which facets of each body were taken as round.

    Parameters
    ----------
    document : dict
        Content of `result.json`.

    Returns
    -------
    dict
        Empty where nothing is round.
    """
    told = [BodyAccount(**one) for one in document["bodies"]]
    told = [one for one in told if one.round_faces or one.round_outline or one.round_holes]
    if not told:
        return {}
    shown = told[:MOST_BODIES]
    more = [f"and {len(told) - MOST_BODIES} more, in log.txt"] if len(told) > MOST_BODIES else []
    blank = [""] * len(more)
    return {
        "": [one.body if len(one.body) <= NAME_WIDTH else one.body[: NAME_WIDTH - 1] + "…" for one in shown] + more,
        "faces": [f"{one.round_faces} of {one.faces}" for one in shown] + blank,
        "outline edges": [str(one.round_outline) for one in shown] + blank,
        "hole edges": [str(one.round_holes) for one in shown] + blank,
        "turning by": [_angles(one) for one in shown] + blank,
    }
