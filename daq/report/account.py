"""The account as text: which estimator and why, where the error comes from, what was checked or left out."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

ODD = 0.01  # a check less probable than this is marked


def account_lines(figures: Mapping[str, Any]) -> list[str]:
    """Return the account of a run as lines of text; nothing where there is no residual yet.

    Parameters
    ----------
    figures
        What `summary` gave.
    """
    account = figures.get("account")
    if not account or figures["kappa_se"] is None:
        return []
    return [
        *_estimator(figures),
        *_orders(figures),
        "",
        *_budget(account["budget"], figures),
        "",
        *_checks(account),
        *_left_out(account, figures),
        *figures["noticed"],
    ]


def _estimator(figures: Mapping[str, Any]) -> Iterator[str]:
    yield f"estimator: {figures['estimator']}, because {figures['why']}"
    model, drift = figures["kappa_model_se"], figures["drift_per_sqrt_hour"]
    if model is not None and drift is not None:
        walk = f"{100 * drift:.2g} % per square root of an hour"
        yield f"counting and a source that walks {walk} would give ± {model:.2e}"


def _orders(figures: Mapping[str, Any]) -> Iterator[str]:
    """Yield every term of order three and above when there are several, and their joint test."""
    terms = figures["terms"]
    high = [term for term in terms["terms"] if term["order"] > 2] if terms else []
    if len(high) < 2:
        return
    for term in high:
        if term["printable"]:
            yield f"{term['name']:>6}  kappa = {term['kappa']:+.3e} ± {term['kappa_se']:.1e}"
        else:
            yield f"{term['name']:>6}  epsilon = {term['epsilon']:+.3e} ± {term['epsilon_se']:.1e} per second"
    joint = terms["joint"]
    if joint and joint["f_p"] is not None:
        yield f"all {joint['dof']} terms of order three and above together: p = {joint['f_p']:.2g}"


def _budget(budget: Mapping[str, Any] | None, figures: Mapping[str, Any]) -> Iterator[str]:
    if budget is None:
        return
    yield "Where the error of kappa comes from (in units of 1e-4)"
    for line in budget["lines"]:
        name = f"{line['name']} ({line['kind']})"
        yield f"{_in_units(line['value']):>9}{_known_to(line)}  {name}: {line['source']}."
        yield f"{'':>11}To halve it: {line['halve'][:1].lower()}{line['halve'][1:]}"
    yield f"{_in_units(budget['total_se']):>9}  total: the jackknife, what it cannot see added in squares"
    if figures["goal_se"]:
        yield f"{_in_units(figures['goal_se']):>9}  goal"


def _in_units(value: float | None) -> str:
    return "not known" if value is None else f"{value / 1e-4:.3f}"


def _known_to(line: Mapping[str, Any]) -> str:
    return "" if line["value_se"] is None else f" ± {line['value_se'] / 1e-4:.3f}"


def _checks(account: Mapping[str, Any]) -> Iterator[str]:
    if account["checks"]:
        yield "Checks (p: how often chance alone is farther off)"
    for check in account["checks"]:
        mark = "  <-- look at this" if check["p"] < ODD else ""
        error = "" if check["se"] is None else f" ± {check['se']:.2g}"
        unit = f" {check['unit']}" if check["unit"] else ""
        yield (
            f"{check['name']}: {check['value']:+.3g}{error}{unit}, expected {check['expected']:+.2g}, "
            f"p = {check['p']:.2g}{mark}"
        )
    odd = account["first_stands_odd_mm"]
    if odd:
        where = ", ".join(f"{place:g}" for place in odd)
        yield f"the first stand does not fit the later ones at {where} mm; it is used all the same"


def _left_out(account: Mapping[str, Any], figures: Mapping[str, Any]) -> Iterator[str]:
    if account["left_out"]:
        by_rule = ", ".join(f"{rule.replace('_', ' ')} {many}" for rule, many in account["left_out"].items())
        yield f"stands left out by rule: {by_rule}"
    if figures["kappa_with_excluded"] is not None:
        yield f"with the stands that are left out kappa is {figures['kappa_with_excluded']:+.3e}"
    if account["doubtful"]:
        yield "so many stands are left out that a person has to decide whether this run counts"
