"""Posterior samples of a fit: draws or grid points with weights, and the prior that the fit put on its parameters."""

import json
from dataclasses import dataclass

import numpy as np

from ..errors import InputError, did_you_mean, one_of
from ..io import header_of

__all__ = ["Draws", "is_posterior", "read_draws", "reference_epoch"]

#: what a fit may have sampled, with the unit
COLUMNS = {"t_E": "d", "pi_E": "", "pi_EN": "", "pi_EE": "", "theta_E": "mas", "mu_rel": "mas/yr"}
_EXTRA = ("weight", "ln_prior", "delta_chi2", "ln_likelihood")
PRIORS = ("uniform", "log-uniform", "column")
_MOST = 2_000_000
_LARGEST = 1e100  # of any number in a file of samples
_EPOCHS = (15020.0, 88069.0)  # MJD, 1900 to 2100


@dataclass(frozen=True, eq=False)
class Draws:
    """Samples of one solution's posterior, with the sampling prior divided out on use.

    Attributes
    ----------
    columns : dict of str to ndarray, shape (n,)
        t_E, and pi_EN with pi_EE, or pi_E, and theta_E, mu_rel where sampled.
    weight : ndarray, shape (n,)
        Of each sample, summing to one.
    ln_prior : ndarray, shape (n,)
        Logarithm of the sampling prior per unit of each column (not of its logarithm), up to a constant.
    prior : str
        The prior in words.
    """

    columns: dict
    weight: np.ndarray
    ln_prior: np.ndarray
    prior: str

    @property
    def size(self):
        """Number of samples."""
        return self.weight.size

    def quantiles(self, name, q=(0.16, 0.5, 0.84)):
        """Return quantiles of a column."""
        order = np.argsort(self.columns[name])
        cumulative = np.cumsum(self.weight[order])
        return tuple(float(np.interp(p * cumulative[-1], cumulative, self.columns[name][order])) for p in q)


def is_posterior(table):
    """Return whether a table holds the samples of one fit rather than a row per event."""
    places = {"l", "b", "ra", "dec", "event", "name", "id"} & set(table.colnames)
    return not places and ("prior" in header_of(table) or "t_E_err" not in table.colnames)


def reference_epoch(value, where):
    """Return an epoch as MJD; full Julian dates are recognised, shortened ones are refused."""
    try:
        epoch = float(value)
    except (TypeError, ValueError):
        raise InputError(f"{where}: t_0par: {value!r} is no epoch; give MJD") from None
    if 2.4e6 < epoch < 2.5e6:
        epoch -= 2400000.5
    if not _EPOCHS[0] <= epoch <= _EPOCHS[1]:
        raise InputError(
            f"{where}: t_0par: {epoch:g} given, must be MJD between {_EPOCHS[0]:g} and {_EPOCHS[1]:g} (or a full JD); "
            "for JD - 2450000 add 49999.5"
        )
    return epoch


def read_draws(table, where, prior=None):
    """Read samples of one solution.

    Parameters
    ----------
    table : astropy.table.Table
        Columns t_E; pi_EN and pi_EE, or pi_E; theta_E, mu_rel if sampled; optionally weight, or delta_chi2 or
        ln_likelihood of grid points; ln_prior where the prior is in a column. The header key ``prior`` is "uniform",
        "log-uniform", "column", or a table with one of the first two words for each column.
    where : str
        Named in complaints.
    prior : str or dict, optional
        Where the header does not say it.

    Returns
    -------
    Draws

    Raises
    ------
    InputError
        A column is missing or unknown, the prior is not declared, or a sample cannot be.
    """
    import astropy.units as u

    if len(table) > _MOST:
        raise InputError(f"{where}: {len(table)} samples, at most {_MOST} are read; thin them")
    columns = {}
    for name in table.colnames:
        if name not in COLUMNS and name not in _EXTRA:
            near = did_you_mean(name, [*COLUMNS, *_EXTRA])
            if near:
                raise InputError(f"{where}: column '{name}' is not known{near}")
            continue
        column = table[name]
        mask = np.asarray(getattr(column, "mask", np.zeros(len(table), bool)))
        try:
            unit = COLUMNS.get(name, "")
            value = np.asarray(u.Quantity(column, column.unit or unit).to_value(unit), dtype=float)
        except (TypeError, ValueError, u.UnitConversionError):
            raise InputError(f"{where}: column {name} must hold numbers{' in ' * bool(unit)}{unit}") from None
        bad = mask | ~(np.abs(value) < _LARGEST)
        if name in ("t_E", "pi_E", "theta_E", "mu_rel"):
            bad |= value <= 0
        if name == "weight":
            bad |= value < 0
        if np.any(bad):
            i = int(np.argmax(bad))
            raise InputError(
                f"{where}: row {i + 1}, column {name}: {value[i]:g} cannot be ({int(bad.sum())} such rows)"
            )
        columns[name] = value
    extra = {name: columns.pop(name) for name in _EXTRA if name in columns}
    _check_needed(columns, where)
    head = header_of(table)
    ln_prior, words = _prior(head.get("prior", prior), columns, extra, where)
    weight = extra.get("weight", np.ones(len(table)))
    ln = -0.5 * extra["delta_chi2"] if "delta_chi2" in extra else extra.get("ln_likelihood", np.zeros(len(table)))
    weight = weight * np.exp(ln - ln.max())
    if "delta_chi2" in extra or "ln_likelihood" in extra:
        # points with a likelihood were laid down as the prior says: what remains is the likelihood alone
        words += ", weighted with the likelihood"
    if not weight.sum() > 0:
        raise InputError(f"{where}: all weights are 0")
    return Draws(columns, weight / weight.sum(), ln_prior, words)


def _check_needed(columns, where):
    if "t_E" not in columns:
        raise InputError(f"{where}: no column 't_E'{did_you_mean('t_E', columns)} (columns: {', '.join(columns)})")
    for one, other in (("pi_EN", "pi_EE"), ("pi_EE", "pi_EN")):
        if one in columns and other not in columns:
            raise InputError(f"{where}: column {one} without {other}; give both, or pi_E")
    if "pi_E" in columns and "pi_EN" in columns:
        raise InputError(f"{where}: pi_E beside pi_EN and pi_EE says the same twice; leave one out")


def _prior(said, columns, extra, where):
    """Logarithm of the sampling prior per unit of each column, and the prior in words."""
    n = columns["t_E"].size
    if isinstance(said, str) and said.strip().startswith("{"):
        try:
            said = json.loads(said)
        except ValueError:
            raise InputError(f"{where}: prior: {said!r} is not understood") from None
    if said is None and "ln_prior" in extra:
        said = "column"
    if said is None:
        raise InputError(
            f"{where}: the sampling prior is not declared; put prior = 'uniform', 'log-uniform' or a table "
            "{column: word} in the header, or a column ln_prior"
        )
    if said == "column":
        if "ln_prior" not in extra:
            raise InputError(f"{where}: prior 'column' needs a column ln_prior")
        return extra["ln_prior"], "from column ln_prior"
    if not isinstance(said, dict):
        said = {name: str(said) for name in columns}
    for name in said:
        one_of(f"{where}: prior", name, columns)
    out, words = np.zeros(n), []
    for name in columns:
        if name not in said:
            raise InputError(f"{where}: the prior of column {name} is not declared; add it to prior in the header")
        word = one_of(f"{where}: prior of {name}", str(said[name]), PRIORS[:2])
        if word == "log-uniform":
            if np.any(columns[name] <= 0):
                raise InputError(f"{where}: prior of {name}: log-uniform, but some samples are not above 0")
            out -= np.log(columns[name])
        words.append(f"{word} in {name}")
    return out, ", ".join(words)
