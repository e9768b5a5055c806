"""The families a prior card can name, the keys of each, and what a key is worth when it is left out."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True)
class Family:
    """One family of laws, as a card speaks of it.

    Parameters
    ----------
    required : tuple of str
        Keys that some line of the card must give.
    optional : tuple of (str, float)
        Keys that may be left out, with what they are worth then.
    """

    required: tuple[str, ...]
    optional: tuple[tuple[str, float], ...] = ()

    @property
    def keys(self) -> tuple[str, ...]:
        """Every key the family knows."""
        return tuple(name for name, _ in self.optional) + self.required


COEFFICIENT_FAMILIES = {
    "normal": Family(("scale",), (("mean", 0.0),)),
    "student_t": Family(("df", "scale"), (("mean", 0.0),)),
    "pooled": Family(("mean_scale", "spread_scale"), (("mean", 0.0), ("unit", 1.0))),
}
SCALE_FAMILIES = {
    "half_normal": Family(("scale",)),
    "half_student_t": Family(("df", "scale")),
    "exponential": Family(("mean",)),
    "lognormal": Family(("median", "spread")),
}
CORRELATION_FAMILIES = {"lkj": Family(("concentration",))}
AUTOCORRELATION_FAMILIES = {"normal": Family((), (("mean", 0.0), ("scale", 0.5), ("limit", 0.95)))}
TAIL_FAMILIES = {"gamma": Family((), (("shape", 2.0), ("rate", 0.1)))}

UNBUILT_FAMILIES = frozenset({("coefficients", "student_t")})
"""(table, family) that a card may write but that no model is built with yet."""

POOLED_ONLY = frozenset({"mean_scale", "spread_scale", "unit"})
"""Keys that mean nothing to a coefficient that is not pooled."""

FAMILIES_OF_TABLE = {
    "coefficients": COEFFICIENT_FAMILIES,
    "scales": SCALE_FAMILIES,
    "correlation": CORRELATION_FAMILIES,
    "autocorrelation": AUTOCORRELATION_FAMILIES,
    "tails": TAIL_FAMILIES,
}
