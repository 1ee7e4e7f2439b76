"""How near a wish is met, and the account of what keeps it from being nearer, as text and as JSON.

Public: shown_target, near_entry, near_lines, account_text.
"""

from __future__ import annotations

from typing import Any

from meshctl.plan.plan import Plan
from meshctl.plan.wanted import MEASURES

ARRAYS = ("real", "imag", "power", "weight", "least_db", "most_db")  # of a target; not repeated in answers
ALSO = {"matrix_error_worst": "at worst"}


def shown_target(target: dict[str, Any]) -> dict[str, Any]:
    """The target of a plan without its arrays."""
    return {k: v for k, v in target.items() if k not in ARRAYS}


def near_entry(fidelity: float, matrix_error: float, measures: dict[str, float], has_matrix: bool) -> dict[str, Any]:
    """The keys of JSON that say how near it comes: fidelity and matrix_error, or what stands in their place."""
    matrix: dict[str, Any] = {"fidelity": fidelity, "matrix_error": matrix_error} if has_matrix else {}
    return matrix | {k: v for k, v in measures.items() if k not in ("fidelity", "matrix_error")}


def near_lines(measures: dict[str, float], before: dict[str, float] | None = None) -> list[str]:
    """A line for each measure of a wish but fidelity and matrix error."""
    lines = []
    for name, value in measures.items():
        if name in ("fidelity", "matrix_error"):
            continue
        words = MEASURES.get(name) or ALSO.get(name, name)
        unit = " dB" if name.endswith("_db") else ""
        earlier = f"     (before limits and codes {before[name]:.3e}{unit})" if before and name in before else ""
        lines.append(f"{words:<14}{value:.3e}{unit}{earlier}")
    return lines


def _signed(value: float | None) -> str:
    return "out of reach" if value is None else f"{value:.3e}"


def account_text(plan: Plan) -> str:
    """The account as a table: causes with their parts, then the elements that would help most."""
    found = plan.account
    unit = " dB" if found["measure"].endswith("_db") else ""
    lines = [
        "",
        f"why not closer: {MEASURES[found['measure']]} {found['error']:.3e}{unit}",
        f"{'cause':<42}{'part':>13}{'without it':>14}{'it alone':>14}",
    ]
    for entry in found["causes"]:
        numbers = (entry["part"], entry["without"], entry["alone"])
        lines.append(
            f"{entry['words']:<42}" + "".join(f"{_signed(n):>{w}}" for n, w in zip(numbers, (13, 14, 14), strict=True))
        )
    lines += [
        f"{'all of them off':<42}{'':>13}{_signed(found['all_off']):>14}",
        f"{'rest, that no single cause explains':<42}{_signed(found['rest']):>13}",
        "Each part is by switching off that cause alone and solving again; parts of causes that act together",
        "overlap (rest below 0) or hide one another (rest above 0).",
    ]
    if found["elements"]:
        lines += ["", f"{'would help most':<24}{'cause':<12}{'off by':>14}{'share':>9}"]
        for entry in found["elements"]:
            off = f"{entry['off']:+.4g} {'dB' if entry['cause'] == 'losses' else 'rad'}"
            lines.append(f"{entry['element']:<24}{entry['cause']:<12}{off:>14}{100.0 * entry['share']:>8.1f}%")
    return "\n".join(lines)
