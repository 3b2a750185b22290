"""What orders a loop in the list, from the contract's JSON, as one sentence: each part is shown."""

from __future__ import annotations

from audit import figures
from audit.records import Quantity
from audit.reports import words
from audit.reports.contract import Json


def order_sentence(order: Json, criticality: int, eu: str, band_pct: float | None = None) -> str:
    """``order`` as in the list's JSON; ``eu`` the loop's engineering unit; ``band_pct`` the spec's
    settling band, percent of the change.
    """
    if order["value"] is None:
        return f"Order in the group: by criticality, {criticality}."
    distance = figures.lone(order["distance"])
    product = (
        f"Order in the group: criticality {criticality} times distance {distance} is "
        f"{figures.lone(order['value'])}"
    )
    if order["quantity"] is None or order["reference"] is None:
        return f"{product}; a loop that does not answer counts as one whole change away."
    quantity = Quantity(order["quantity"])
    reference = figures.lone(order["reference"])
    if order["reference_kind"] == "limit":
        reference = figures.plain(order["reference"])
    reference = figures.with_unit(reference, words.unit_of(quantity, eu))
    return (
        f"{product}; the distance is that of the {words.name_of(quantity.value, band_pct)} from "
        f"its {order['reference_kind']}, {reference}."
    )
