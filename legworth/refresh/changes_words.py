"""The report in plain words: why each price moved and each product flipped, and figures for people."""

from __future__ import annotations

from itertools import pairwise

from legworth.refresh.changes_causes import How
from legworth.refresh.changes_prices import PriceMove
from legworth.refresh.changes_products import Flip
from legworth.report import price_text

__all__ = [
    "STEPS",
    "cause_sentence",
    "count_of",
    "duration",
    "flip_reason",
    "rounded_steps",
    "shown_move",
    "signed",
]

STEPS = ("seats", "demand", "fares", "neighbours")
"""The steps that lead from last night's price to tonight's, in order."""


def count_of(number: int, one: str, many: str = "") -> str:
    """Count and noun, such as ``1 seat`` or ``2,000 seats``."""
    return f"{number:,} {one if number == 1 else many or one + 's'}"


def signed(value: float, decimals: int = 2) -> str:
    """Figure with its sign; what rounds to nothing has none."""
    rounded = round(value, decimals)
    return f"{rounded:+,.{decimals}f}" if rounded else f"{0:.{decimals}f}"


def duration(seconds: float) -> str:
    """Seconds for people, such as ``2 min 14 s``."""
    minutes, rest = divmod(round(seconds), 60)
    hours, minutes = divmod(minutes, 60)
    parts = [f"{hours} h"] * (hours > 0) + [f"{minutes} min"] * (minutes > 0 or hours > 0)
    return " ".join([*parts, f"{rest} s"]) if seconds >= 10 else f"{seconds:.1f} s"


def rounded_steps(move: PriceMove) -> tuple[float, ...]:
    """What the four steps did, rounded to cents so that they add up to the rounded prices."""
    cause, at = move.cause, move.then
    prices = [round(at, 2)]
    for name in STEPS[:-1]:
        at += getattr(cause, name)
        prices.append(round(at, 2))
    prices.append(round(move.now, 2))
    return tuple(round(after - before, 2) for before, after in pairwise(prices))


def shown_move(move: PriceMove) -> float:
    """Price now less then, both as they are shown, in cents."""
    return round(move.now, 2) - round(move.then, 2)


def cause_sentence(move: PriceMove, currency: str) -> str:
    """Why a price moved, the largest cause first: "41 seats sold since last night raised the price by 12.30 EUR."."""
    cause = move.cause
    if cause.how is How.NOT:
        known = f"{_seats(move)}; " if move.sold or move.added else ""
        return _sentence(f"{known}what that did to the price is not known, because {cause.why_not}")
    steps = rounded_steps(move)
    subjects = (_seats(move), _demand(move, steps[1]), _fares(move), _neighbours(move))
    effects = zip(steps, subjects, strict=True)
    clauses: list[str] = []
    for effect, subject in sorted(effects, key=lambda pair: -abs(pair[0])):
        if effect:
            way, size = "raised" if effect > 0 else "lowered", price_text(abs(effect))
            clauses.append(f"{subject} {way} {f'it by {size}' if clauses else f'the price by {size} {currency}'}")
    text = "; ".join(clauses) or "the price moved by less than a cent"
    if cause.how is How.LEG:
        text += f" (first-order: this leg alone, the others at last night's prices, because {cause.why_not})"
    return _sentence(text)


def flip_reason(flip: Flip, currency: str) -> str:
    """Why a product was closed or opened."""
    if flip.opened and flip.seats_then == 0:
        return f"seats came free on its path, {flip.seats:,} now"
    if not flip.opened and flip.seats == 0:
        return f"no seat is left on its path, {flip.seats_then:,} were last night"
    reasons = []
    if price_text(flip.displacement) != price_text(flip.displacement_then):
        way = "rose" if flip.displacement > flip.displacement_then else "fell"
        reasons.append(
            f"the price of its path {way} from {price_text(flip.displacement_then)} to {price_text(flip.displacement)}"
        )
    if flip.fare != flip.fare_then:
        way = "was raised" if flip.fare > flip.fare_then else "was lowered"
        reasons.append(f"its fare {way} from {price_text(flip.fare_then)} to {price_text(flip.fare)}")
    return " and ".join(reasons) + f" {currency}" if reasons else "its fare and the price of its path are all but equal"


def _sentence(text: str) -> str:
    return f"{text[:1].upper()}{text[1:]}."


def _seats(move: PriceMove) -> str:
    found = []
    if move.sold:
        sold, back = f"{count_of(move.sold, 'seat')} sold", f"{count_of(-move.sold, 'seat')} that came back"
        found.append(sold if move.sold > 0 else back)
    if move.added:
        verb = "added" if move.added > 0 else "taken away"
        found.append(f"{count_of(abs(move.added), 'seat')} {verb}")
    if not found:
        return f"the change from {move.seats_then:,} to {count_of(move.seats_now, 'seat')} left"
    return " and ".join(found) + " since last night"


def _demand(move: PriceMove, effect: float) -> str:
    facts = move.cause.facts
    assert facts is not None
    then, now = f"{facts.demand_then:,.1f}", f"{facts.demand_now:,.1f}"
    if then == now or (facts.demand_now > facts.demand_then) != (effect > 0):
        return f"demand to come shifting among its products (from {then} to {now} passengers in all)"
    way = "rising" if facts.demand_now > facts.demand_then else "falling"
    return f"demand to come for it {way} from {then} to {now} passengers"


def _fares(move: PriceMove) -> str:
    facts = move.cause.facts
    assert facts is not None
    products = count_of(facts.fares_changed, "product")
    return (
        f"other fares on {products} (on average {price_text(facts.fare_now)} "
        f"where they were {price_text(facts.fare_then)})"
    )


def _neighbours(move: PriceMove) -> str:
    facts = move.cause.facts
    if facts is None or not facts.neighbour:
        return "the rest of the network"
    return f"the rest of the network, where {facts.neighbour} moved most ({signed(facts.neighbour_move)}),"
