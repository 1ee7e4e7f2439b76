"""The command `tolerance`: how far dies will be off, as text and as JSON.

Public: tolerance.
"""

from __future__ import annotations

import json
import sys
from argparse import Namespace
from collections.abc import Sequence
from pathlib import Path

from meshctl.cli.watch import Watch
from meshctl.errors import DONE, INTERRUPTED
from meshctl.mesh.spread import CAUSES
from meshctl.session import Session
from meshctl.tolerances.budget import Budget
from meshctl.tolerances.chunks import finite
from meshctl.tolerances.lattices import Compared
from meshctl.tolerances.requirement import Yield
from meshctl.tolerances.spec import Allowed, Specification
from meshctl.tolerances.trials import Progress
from meshctl.tolerances.whole import Ears, Question, Tolerance

LISTED = 5  # elements that add most


def tolerance(words: Namespace) -> int:
    session = Session(words.mesh)
    session.open_plan(words.plan, stale_ok=words.stale_ok)
    question = Question(
        words.trials, words.seed, words.policy, tuple(words.require), words.until, words.scale, words.spec,
        words.wish, Path(words.out) if words.out else None, words.processes, words.cluster, words.lattices,
    )  # fmt: skip
    with Watch("trials") as watch:

        def trials(now: Progress) -> None:
            good = "" if now.met is None else f", yield {_yield(now.met)}"
            watch.tell(f"{now.trials} of at most {now.asked} dies{good}; Ctrl-C keeps what is done")

        ears = Ears(trials, lambda cause: watch.tell(f"specification: {cause}"), watch.stopped)
        made = session.tolerance(question, ears)
    for line in (*session.remarks, *made.remarks):
        print(f"warning: {line}", file=sys.stderr)
    if words.figures:
        from meshctl.plots_tolerance import tolerance_figures

        for path in tolerance_figures(made, Path(words.figures)):
            print(f"wrote {path}", file=sys.stderr)
    if words.json:
        print(json.dumps(finite(made.entry()), allow_nan=False))
    else:
        print(tolerance_text(made))
    if made.interrupted:
        kept = f"kept in {words.out}: the same command goes on" if words.out else "not kept: name a folder with -o"
        print(f"meshctl tolerance: interrupted after {made.found.trials} dies, {kept}", file=sys.stderr)
        return INTERRUPTED
    return DONE


def _yield(found: Yield) -> str:
    return f"{100 * found.share:.2f} % ({100 * found.low:.2f} to {100 * found.high:.2f} %)"


def tolerance_text(made: Tolerance) -> str:
    """Budget, measures, yield and specification for people."""
    found, lines = made.found, []
    lines.append(f"{made.mesh.name}: {found.trials} dies, {made.question.policy}, seed {made.question.seed}")
    if made.budget is not None:
        lines += ["", *_budget_lines(made.budget, made.mesh.net.names.elements)]
    if found.trials:
        lines += ["", f"{'measure':<20}{'no scatter':>12}{'mean':>12}{'5 %':>12}{'median':>12}{'95 %':>12}"]
        for name in found.task.goal.measures:
            s = found.summary(name)
            keys = ("nominal", "mean", "quantile_0.05", "quantile_0.5", "quantile_0.95")
            lines.append(f"{name:<20}" + "".join(_cell(s.get(key)) for key in keys))
        if found.requirements:
            lines.append("")
            lines += [f"yield {_yield(y)} for {words}" for words, y in _yields(made)]
    if made.spec is not None:
        lines += ["", *_spec_lines(made.spec)]
    if made.lattices:
        lines += ["", *_lattice_lines(made.lattices)]
    return "\n".join(lines)


def _lattice_lines(rows: Sequence[Compared]) -> list[str]:
    head = f"{'lattice':<15}{'modes':>6}  {'target':<8}{'measure':<14}"
    lines = [f"{head}{'budget':>12}{'as set':>12}{'corrected':>12}{'crosstalk dB':>14}"]
    for row in rows:
        start = f"{row.lattice:<15}{row.modes:>6}  {row.target:<8}{row.measure:<14}"
        if row.reason:
            lines.append(f"{start}  {row.reason[:70]}")
        else:
            lines.append(start + "".join(_cell(v) for v in (row.budget, row.as_set, row.corrected, row.crosstalk_db)))
    return lines


def _yields(made: Tolerance) -> list[tuple[str, Yield]]:
    from meshctl.tolerances.requirement import yield_of

    found = made.found
    one = [(str(r), yield_of(int(r.met(found.column(r.measure)).sum()), found.trials)) for r in found.requirements]
    whole = found.yield_
    return one if len(one) == 1 or whole is None else [*one, ("all of them", whole)]


def _cell(value: float | None) -> str:
    return f"{'-':>12}" if value is None or value != value else f"{value:>12.5g}"


def _budget_lines(budget: Budget, names: list[str]) -> list[str]:
    lines = [f"mean E^2 {budget.e2:.4g} to first order, {budget.e2_nominal:.2g} of it without scatter"]
    for cause, added in sorted(budget.by_cause.items(), key=lambda item: -item[1]):
        lines.append(f"  {cause:<18}{added:>11.4g}  {CAUSES[cause].help}")
    order = (-budget.by_element).argsort(kind="stable")[:LISTED].tolist()
    most = ", ".join(f"{names[e]} {budget.by_element[e]:.2g}" for e in order if budget.by_element[e] > 0.0)
    return [*lines, f"most of it from {most}"] if most else lines


def _spec_lines(spec: Specification) -> list[str]:
    wanted = " and ".join(str(r) for r in spec.requirements)
    lines = [
        f"allowed for a yield of {100 * spec.wish:g} % at {wanted}, by {spec.trials} dies each",
        f"{'cause':<18}{'scale':>10}{'allowed':>12}  yield there",
    ]
    return lines + [_allowed_line(a) for a in spec.allowed.values()]


def _allowed_line(a: Allowed) -> str:
    value = "" if a.value is None else f"{a.value:.4g}"
    unit = " bits" if a.cause == "codes" else ""
    if a.limit == "none":
        return f"{a.cause:<18}{'>' + format(a.scale, '.4g'):>10}{value + unit:>12}  does no harm"
    if a.limit == "nothing" or a.met is None:
        return f"{a.cause:<18}{'0':>10}{'':>12}  none is allowed"
    return f"{a.cause:<18}{a.scale:>10.4g}{value + unit:>12}  {_yield(a.met)}"
