"""Whether the eliminated coefficients lie where their priors expect them, in words."""

from __future__ import annotations

from collections.abc import Iterator
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from inverse.inference.problem.posterior import Member

if TYPE_CHECKING:
    from inverse.inference.inversion import Inversion

__all__ = ["coefficient_warnings"]

Array = NDArray[np.float64]

FAR = 4.0
"""Prior widths from zero beyond which a coefficient is told: one draw of the prior in sixteen thousand lies there."""

_FIELDS = {"P": "dn_dstrain", "Q": "dn_dT", "N": "dn_dN"}


def coefficient_warnings(inversion: Inversion, values: Array) -> list[str]:
    """Warn where the trace wants a coefficient that its prior all but excludes: that bends the other unknowns.

    Parameters
    ----------
    inversion : Inversion
    values : array, shape (unknowns,)
        At the best minimum, public units.

    Returns
    -------
    list of str
        One sentence per coefficient.
    """
    named = inversion.posterior.parameters.named(np.atleast_2d(values))
    return [text for member in inversion.posterior.members for text in _far_out(member, member.local(named))]


def _far_out(member: Member, local: dict[str, Array]) -> Iterator[str]:
    label = f"{member.label}: " if member.label else ""
    mean = member.model.eliminated(local).mean[0]
    for name, size in zip(member.model.layout.names, np.abs(mean), strict=False):
        if size <= FAR:
            continue
        if name == "displacement":
            mend = "check the indices and the stack"
        else:
            group, letter, _ = name.rsplit(".", 2)
            mend = (
                f"give {_FIELDS[letter]} of {group} as a pair of priors that admits it, or check the indices"
            )
        yield (
            f"{label}the coefficient {name} lies {size:.1f} prior widths from zero, which bends the other unknowns; "
            f"{mend}."
        )
