"""The lines above a table: what was fitted, under which noise model, and whether it converged."""

from __future__ import annotations

import json
import math
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from inverse.report.summary import LEAST_ESS, MOST_RHAT, Row
from inverse.report.unit_text import unit_text

__all__ = ["header_lines"]

_POSTERIOR_NOTE = "Intervals are central (equal tails); narrowed = prior width / posterior width."
_CONSTANTS_NOTE = (
    "Intervals take the constants as known: where the flags say 'constants ±', what is not known of them would add "
    "more than the interval holds (budget says which)."
)
_FIT_NOTE = (
    "Intervals are normal, from the linearised covariance; sample the posterior before you publish them. They take the "
    "constants as known: budget says what each would add."
)


def header_lines(result: Any, rows: Sequence[Row]) -> tuple[str, ...]:
    """Describe a result in a few lines.

    Parameters
    ----------
    result : xarray.DataTree or least-squares result
        The tree's JSON attribute ``inverse`` may hold ``stack`` (text), ``noise`` (with ``model``),
        ``convergence`` (``converged``, ``message``) and ``warnings`` (texts).
    rows : sequence of Row
        Every quantity of the result, also those that will not be shown.

    Returns
    -------
    tuple of str
        Lines without line ends.
    """
    if not hasattr(result, "children"):
        return (_minima_line(result), _FIT_NOTE)
    information = json.loads(result.attrs.get("inverse", "{}"))
    lines = [f"Stack: {information['stack']}"] if isinstance(information.get("stack"), str) else []
    lines += _data_lines(result)
    if "noise" in information:
        lines.append(f"Noise model: {information['noise']['model']}")
    lines.append(_sampling_line(result, information, rows))
    flagged = any(flag.startswith("constants ±") for row in rows for flag in row.flags)
    notes = (_POSTERIOR_NOTE, _CONSTANTS_NOTE) if flagged else (_POSTERIOR_NOTE,)
    return (*lines, *(f"Warning: {text}" for text in information.get("warnings", ())), *notes)


def _minima_line(fit: Any) -> str:
    if len(fit.minima) == 1:
        return "Least squares: one minimum found."
    shares = ", ".join(f"{100 * minimum.weight:.3g} %" for minimum in fit.minima)
    return f"Least squares: {len(fit.minima)} minima hold {shares} of the probability; the first is shown."


def _data_lines(tree: Any) -> list[str]:
    return [_data_line(tree[g].to_dataset()) for g in tree.children if g.startswith("observed_data")]


def _data_line(observed: Any) -> str:
    if "delay" not in observed.coords:
        return f"Data: {observed.sizes['measurement']} measurements"
    delay = np.asarray(observed["delay"])
    unit = unit_text(observed["delay"].attrs.get("units", "ps"))
    channels = " and ".join(str(name) for name in observed.data_vars)
    return f"Data: {channels}, {delay.size} delays from {delay.min():.4g} to {delay.max():.4g} {unit}"


def _sampling_line(tree: Any, information: Mapping[str, Any], rows: Sequence[Row]) -> str:
    sizes = tree["posterior"].to_dataset().sizes
    known = [row for row in rows if row.role != "derived"] or list(rows)
    ess = min((_or_nan(row.ess) for row in known), key=_worst_first)
    rhat = max((_or_nan(row.rhat) for row in known), key=lambda x: math.inf if math.isnan(x) else x)
    verdict = _verdict(information.get("convergence"), ess, rhat)
    return (
        f"Sampling: {sizes['chain']} ensembles, {sizes['draw']} draws each; "
        f"smallest bulk effective sample size {ess:.0f}, largest R-hat {rhat:.3f}: {verdict}"
    )


def _verdict(stated: Any, ess: float, rhat: float) -> str:
    """Say converged only if the run says so (or says nothing) and the draws agree."""
    stated = stated or {"converged": ess >= LEAST_ESS, "message": "Sample longer."}
    if not stated["converged"]:
        return f"NOT converged. {stated['message']}".rstrip()
    if not rhat <= MOST_RHAT:
        return f"NOT converged: R-hat should be at most {MOST_RHAT}; sample longer."
    return "converged." if ess >= LEAST_ESS else f"converged, but fewer than {LEAST_ESS:.0f} effective draws."


def _worst_first(number: float) -> float:
    return -math.inf if math.isnan(number) else number


def _or_nan(number: float | None) -> float:
    return math.nan if number is None else number
