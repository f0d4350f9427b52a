"""Unknowns: a property with a prior in place of a number."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from inverse.description.quantities import check, quantity

__all__ = [
    "Unknown",
    "checked",
    "describe_prior",
    "is_distribution",
    "is_unknown",
    "prior_text",
    "rebuild_prior",
    "shown",
    "validate_prior",
]


@dataclass(frozen=True, eq=False)
class Unknown:
    """One unknown that may stand in several places; the same object is the same unknown.

    Parameters
    ----------
    name : str
        The name it goes by in every result.
    prior : frozen scipy.stats distribution
        Continuous, in the unit of the property it stands for.

    Raises
    ------
    ValueError
        If the name is empty or holds ``/``, or the prior is not a frozen continuous distribution.

    Examples
    --------
    >>> from scipy import stats
    >>> from inverse import Unknown
    >>> Unknown("v_film", stats.norm(6.42, 0.10)).name
    'v_film'
    """

    name: str
    prior: Any

    def __post_init__(self) -> None:
        if not isinstance(self.name, str) or not self.name.strip() or "/" in self.name:
            raise ValueError(
                f"Unknown name {self.name!r}: give a non-empty text without '/', such as 'v_film'."
            )
        if not is_distribution(self.prior):
            raise ValueError(
                f"Unknown '{self.name}' got {self.prior!r} as its prior; give a frozen continuous "
                "scipy.stats distribution, such as stats.norm(6.42, 0.10)."
            )

    def __repr__(self) -> str:
        """Write name and prior."""
        return f"Unknown({self.name!r}, {prior_text(self.prior)})"


def is_distribution(value: object) -> bool:
    """Tell whether `value` is a frozen continuous scipy.stats distribution."""
    return all(hasattr(value, part) for part in ("dist", "logpdf", "ppf", "support"))


def is_unknown(value: object) -> bool:
    """Tell whether `value` marks an unknown: a frozen distribution or an `Unknown`."""
    return isinstance(value, Unknown) or is_distribution(value)


_PROBABILITIES = (0.01, 0.5, 0.99)


def prior_text(prior: Any) -> str:
    """Write a frozen distribution as it was called, to six digits: ``norm(60, 1)``."""
    keywords = (f"{name}={_six(value)}" for name, value in prior.kwds.items())
    return f"{prior.dist.name}({', '.join([*map(_six, prior.args), *keywords])})"


def _six(value: Any) -> str:
    return f"{value:.6g}" if isinstance(value, int | float | np.number) else str(value)


def shown(value: Any) -> str:
    """Write what may stand in a field: a prior as it was called, a table by its range, the rest as it is."""
    if is_distribution(value):
        return prior_text(value)
    if isinstance(value, tuple):
        return f"({', '.join(map(shown, value))})"
    if isinstance(value, Mapping):
        return f"{{{', '.join(f'{_six(key)}: {shown(v)}' for key, v in value.items())}}}"
    return f"{value:.6g}" if isinstance(value, float) else repr(value)


def validate_prior(name: str, prior: Any, where: str = "") -> None:
    """Check that the middle 98 % of a prior lies in the allowed range of quantity `name`.

    Raises
    ------
    ValueError
        If the prior is not one distribution with finite numbers and a positive scale, a quantile is outside the
        range, or a thickness has a prior of infinite mean. Tails outside the range have probability zero.
    """
    label = f"{where}.{name}" if where else name
    quantiles = np.asarray([prior.ppf(probability) for probability in _PROBABILITIES])
    if quantiles.ndim != 1:
        raise ValueError(
            f"{label} has {prior_text(prior)} as its prior, which is several distributions; give numbers, not arrays."
        )
    if np.isnan(quantiles).any():
        raise ValueError(
            f"{label} has {prior_text(prior)} as its prior, which has no quantiles; its numbers must be finite and its "
            "scale positive."
        )
    for probability, quantile in zip(_PROBABILITIES, quantiles, strict=True):
        try:
            check(name, float(quantile), where)
        except ValueError as error:
            raise ValueError(f"The prior's {probability:.0%} quantile does not fit. {error}") from None
    if name == "thickness" and prior.mean() == np.inf:
        raise ValueError(
            f"{label} has {prior_text(prior)} as its prior, whose mean is infinite: one draw in a hundred is above "
            f"{quantiles[-1]:.3g} nm. Give one whose tail ends or falls fast, such as stats.uniform(40, 40) or "
            "stats.lognorm(0.3, scale=60)."
        )


def checked(field: str, value: Any, where: str) -> Any:
    """Return a number in the allowed range of a quantity, or the prior or `Unknown` given for it.

    Raises
    ------
    ValueError
        If the number, or the middle 98 % of the prior, is out of range.
    """
    if is_unknown(value):
        validate_prior(field, value.prior if isinstance(value, Unknown) else value, where)
        return value
    return check(field, value, where)


def describe_prior(prior: Any) -> dict[str, Any]:
    """Describe a frozen distribution as plain data: family, arguments, keywords.

    Raises
    ------
    ValueError
        If the distribution is not one of scipy.stats by name, so that no file could rebuild it.
    """
    from scipy import stats

    family = getattr(getattr(prior, "dist", None), "name", None)
    if family is None or not hasattr(stats, family):
        raise ValueError(
            f"The prior {prior!r} is not a named scipy.stats family, so a result could not be saved and rebuilt; "
            "use a named family such as stats.norm, stats.uniform, stats.truncnorm or stats.loguniform."
        )
    plain = [float(np.asarray(a)) for a in prior.args]
    keywords = {k: float(np.asarray(v)) for k, v in prior.kwds.items()}
    return {"family": family, "args": plain, "kwds": keywords}


def rebuild_prior(description: dict[str, Any]) -> Any:
    """Rebuild the frozen distribution that `describe_prior` described."""
    from scipy import stats

    return getattr(stats, description["family"])(*description["args"], **description["kwds"])


def label(name: str) -> str:
    """Return an axis label with unit for an unknown or derived quantity."""
    q = quantity(name)
    return f"{name} ({q.unit})" if q.unit != "1" else name
