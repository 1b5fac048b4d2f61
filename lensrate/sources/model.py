"""The source stars of a sightline: rule, luminosity functions and dust joined to a weight against distance."""

from dataclasses import dataclass

import numpy as np

from .extinction import DustDisc, Extinction, sightline_extinction
from .luminosity import clump_magnitude
from .rules import ClumpRule, DistanceRule, LimitRule, PeakRule

__all__ = ["LineSources", "Sources"]

_MODULUS_1_KPC = 10.0  # mag
_CLUMP_WINDOW = 0.5  # mag around the clump at the Galactic centre, where disc clump giants are taken for bulge ones


@dataclass(frozen=True, eq=False)
class LineSources:
    """Source weight of each Galactic component against distance, on one sightline.

    Attributes
    ----------
    rule : ClumpRule, LimitRule, PeakRule or DistanceRule
    shining : tuple
        LuminosityFunction of each component, None where it supplies no sources.
    dust : Extinction
    extinction : dict of str to float
        What the header reports: A by band [mag].
    warnings : tuple of str
    bulge : tuple of bool
        Which components are bulge.
    R0 : float
        Distance of the Galactic centre [kpc].
    """

    rule: object
    shining: tuple
    dust: Extinction
    extinction: dict
    warnings: tuple
    bulge: tuple
    R0: float

    @property
    def fixed_distance(self):
        """The one source distance [kpc] of a distance rule, else None."""
        return self.rule.distance if isinstance(self.rule, DistanceRule) else None

    @property
    def counts_stars(self):
        """Whether the weights are numbers of stars, so that a surface density makes sense."""
        return not isinstance(self.rule, DistanceRule)

    def per_msun(self, D):
        """Return the number of source stars per solar mass of each component's stated mass.

        Parameters
        ----------
        D : ndarray, shape (n,)
            Distance [kpc].

        Returns
        -------
        ndarray, shape (components, n)
        """
        D = np.asarray(D, dtype=float)
        out = np.zeros((len(self.shining), D.size))
        if isinstance(self.rule, (LimitRule, PeakRule)):
            with np.errstate(divide="ignore"):
                absolute = self.rule.magnitude - 5.0 * np.log10(D) - _MODULUS_1_KPC - self.dust(D)
        for i, shine in enumerate(self.shining):
            if shine is None:
                continue
            if isinstance(self.rule, LimitRule):
                out[i] = shine.brighter(absolute)
            elif isinstance(self.rule, PeakRule):
                out[i] = sum(share * shine.brighter(absolute + gain) for gain, share in zip(*self.rule.gains()))
            elif isinstance(self.rule, ClumpRule):
                out[i] = shine.clump_per_msun
                if not self.bulge[i]:
                    near, far = self._clump_window()
                    out[i] *= (near < D) & (far > D)
            else:
                out[i] = 1.0
        return out

    def beyond_faintest(self, D, weight):
        """Return the last absolute magnitude counted, and the share of sources where the limit is fainter still.

        Parameters
        ----------
        D, weight : ndarray, shape (n,)
            Distances [kpc] and how many sources are there.

        Returns
        -------
        faintest, share : float
            NaN and 0 where the rule has no limit.
        """
        lit = [s.faintest for s in self.shining if s is not None]
        total = weight.sum()
        if not isinstance(self.rule, (LimitRule, PeakRule)) or not lit or not total > 0:
            return float("nan"), 0.0
        with np.errstate(divide="ignore"):
            absolute = self.rule.magnitude - 5.0 * np.log10(D) - _MODULUS_1_KPC - self.dust(D)
        return max(lit), float(weight[absolute > max(lit)].sum() / total)

    def _clump_window(self):
        """Distances [kpc] between which a clump giant is within half a magnitude of one at the centre."""
        return self.R0 * 10 ** (-_CLUMP_WINDOW / 5), self.R0 * 10 ** (_CLUMP_WINDOW / 5)

    def weights(self, D, density):
        """Return sources per steradian and kpc of distance, or relative weights for one distance.

        Parameters
        ----------
        D : ndarray, shape (n,)
            Distance [kpc].
        density : ndarray, shape (components, n)
            Mass density [Msun/kpc^3].

        Returns
        -------
        ndarray, shape (components, n)
        """
        return density * D**2 * self.per_msun(D)

    def kinks(self):
        """Return distances [kpc] at which the weight jumps or the red clump crosses the limit, as panel edges."""
        if isinstance(self.rule, ClumpRule) and self.rule.discs:
            return self._clump_window()
        if not isinstance(self.rule, (LimitRule, PeakRule)):
            return ()
        lit = [s for s in self.shining if s is not None]
        if not lit:
            return ()
        D = np.geomspace(0.05, 60.0, 600)
        absolute = self.rule.magnitude - 5.0 * np.log10(D) - _MODULUS_1_KPC - self.dust(D)
        edges = []
        centre = clump_magnitude(lit[0].band)
        for mark in (centre - 0.25, centre, centre + 0.25):
            above = absolute - mark
            edges += [float(D[i]) for i in np.flatnonzero(np.diff(np.sign(above)) != 0)]
        return tuple(edges)


@dataclass(frozen=True, eq=False)
class Sources:
    """Source rule, luminosity functions and dust of a scenario.

    Attributes
    ----------
    rule : ClumpRule, LimitRule, PeakRule or DistanceRule
    luminosities : tuple
        LuminosityFunction of each component, or None.
    dust : DustDisc
    measured : dict of str to float
        The field's own extinction at the bulge, by band [mag].
    references : tuple of str
    """

    rule: object
    luminosities: tuple
    dust: DustDisc
    measured: dict
    references: tuple = ()

    @property
    def band(self):
        """Band that the report of extinction is in."""
        return self.rule.band if isinstance(self.rule, (LimitRule, PeakRule)) else "I"

    def toward(self, l, b, galaxy):
        """Return the source weights of a sightline.

        Parameters
        ----------
        l, b : float
            Direction [rad].
        galaxy : Galaxy
            Whose components are the sources.

        Returns
        -------
        LineSources
        """
        bulge_only = isinstance(self.rule, ClumpRule) and not self.rule.discs
        shining = tuple(
            shine if c.sources and (c.bulge or not bulge_only) else None
            for c, shine in zip(galaxy.components, self.luminosities)
        )
        uses_dust = isinstance(self.rule, (LimitRule, PeakRule))
        dust = sightline_extinction(
            self.dust, l, b, self.band, self.measured or None, galaxy.R0, float(galaxy.sun.z.to_value("kpc"))
        )
        return LineSources(
            self.rule,
            shining,
            dust,
            {self.band: dust.at_R0} if uses_dust else {},
            dust.warnings if uses_dust else (),
            tuple(c.bulge for c in galaxy.components),
            galaxy.R0,
        )
