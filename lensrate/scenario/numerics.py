"""Steps and ranges of the quadratures, as a scenario may state them."""

from dataclasses import dataclass, field, fields

from ..errors import InputError, one_of

__all__ = ["Numerics"]


def _step(default, low, high):
    return field(default=default, metadata={"range": (low, high)})


@dataclass(frozen=True)
class Numerics:
    """Steps and ranges of the quadratures; every one may be halved to see that nothing reported moves."""

    step_dex: float = _step(0.05, 0.005, 0.2)  # of mu_rel and t_E; pi_rel and M: twice it
    nodes: int = _step(5, 2, 24)  # Gauss-Legendre nodes per panel, two more for totals
    directions: float = _step(3.0, 1.0, 12.0)  # density of directions on a circle of mu
    half_circle: int = _step(16, 8, 64)  # directions of the mean speed
    q_max: float = _step(18.0, 8.0, 60.0)  # exponents beyond are dropped
    weight_cut: float = _step(1e-6, 0.0, 1e-3)  # nodes lighter than this share of the peak
    D_max: float = _step(100.0, 1.0, 500.0)  # kpc, where the stars of the model end
    merge_sources: bool = True  # moment-match source rows of one group for the rate density

    def __post_init__(self):
        for f in fields(self):
            value = getattr(self, f.name)
            if "range" not in f.metadata:
                if not isinstance(value, bool):
                    raise InputError(f"numerics.{f.name}: {value!r} given, must be true or false")
                continue
            low, high = f.metadata["range"]
            if isinstance(value, bool) or not isinstance(value, (int, float)) or not low <= value <= high:
                raise InputError(f"numerics.{f.name}: {value!r} given, must be between {low:g} and {high:g}")
            if f.type is int and not float(value).is_integer():
                raise InputError(f"numerics.{f.name}: {value!r} given, must be a whole number")
            object.__setattr__(self, f.name, f.type(value))

    @classmethod
    def from_dict(cls, table):
        """Build from a scenario's table, with the nearest known key for a misspelt one."""
        for key in table:
            one_of("numerics", key, [f.name for f in fields(cls)])
        return cls(**table)

    def halved(self):
        """Return numerics with every step halved, for convergence tests."""
        return Numerics(
            self.step_dex / 2,
            min(2 * self.nodes, 24),
            2 * self.directions,
            2 * self.half_circle,
            2 * self.q_max,
            self.weight_cut / 100,
            self.D_max,
            self.merge_sources,
        )
