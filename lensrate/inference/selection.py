"""Which events are in a sample, and how far they got: declared probabilities of its stages by class."""

from dataclasses import dataclass, field

import numpy as np

from ..errors import InputError, one_of

__all__ = ["STAGES", "Selection"]

#: stages of a sample after an event is found, each a subset of the one before
STAGES = ("parallax", "followed", "mass")


@dataclass(frozen=True)
class Selection:
    """Declared probabilities of a sample's stages by class, for events that reached the stage before.

    Attributes
    ----------
    parallax, followed, mass : dict of str to float
        Probability by class, 1 for one that is not named; empty: the stage says nothing of the class and drops out.
    listed : str
        What an event must have to be in the sample: "found", or a stage.
    """

    parallax: dict = field(default_factory=dict)
    followed: dict = field(default_factory=dict)
    mass: dict = field(default_factory=dict)
    listed: str = "found"

    def __post_init__(self):
        one_of("selection: listed", self.listed, ("found", *STAGES))
        for stage in STAGES:
            for lens, p in getattr(self, stage).items():
                if isinstance(p, bool) or not isinstance(p, (int, float)) or not 0 <= p <= 1:
                    raise InputError(f"selection: {stage} of {lens}: {p!r} given, a probability from 0 to 1 is needed")

    @classmethod
    def parse(cls, items, listed="found", classes=()):
        """Read ``STAGE:CLASS=P`` texts; ``all`` for every class.

        Raises
        ------
        InputError
            Unknown stage or class (with the nearest known one), or no probability.
        """
        made = {stage: {} for stage in STAGES}
        for item in items:
            left, equals, value = str(item).partition("=")
            stage, colon, lens = left.partition(":")
            if not (equals and colon):
                raise InputError(
                    f"selection: '{item}' is not understood; write STAGE:CLASS=P, e.g. mass:black_hole=0.5"
                )
            one_of("selection: stage", stage, STAGES)
            one_of("selection: class", lens, [*classes, "all"])
            try:
                p = float(value)
            except ValueError:
                raise InputError(f"selection: '{item}': '{value}' is no probability") from None
            made[stage].update(dict.fromkeys(classes if lens == "all" else [lens], p))
        out = cls(**made, listed=listed)
        for stage, table in made.items():
            left = [c for c in classes if c not in table]
            if table and left:
                raise InputError(
                    f"selection: {stage} is declared for {', '.join(table)} and not for {', '.join(left)}; give all of "
                    f"them, for example {stage}:all=0.1 first"
                )
        return out

    def draw(self, lens, rng):
        """Return how far events got, as a table would show it: "found", "parallax", "followed" or "mass".

        Parameters
        ----------
        lens : sequence of str
            Class of every event.
        rng : Generator

        Returns
        -------
        reached : ndarray of str
        listed : ndarray of bool
            Whether an event is in the sample at all.
        """
        reached, going = np.full(len(lens), "found", dtype="<U8"), np.ones(len(lens), dtype=bool)
        deep = bool(self.followed or self.mass) or self.listed == "mass"
        listed = going.copy()
        for stage in STAGES:
            table = getattr(self, stage)
            if table:
                going = going & (rng.random(len(lens)) < np.array([table.get(c, 1.0) for c in lens]))
            if deep or stage == "parallax":
                reached[going] = stage
            if stage == self.listed:
                listed = going.copy()
        if self.listed != "followed":
            reached[reached == "followed"] = "parallax"  # a follow-up that gave no mass leaves no trace
        return reached, listed

    def weight(self, lens, reached):
        """Return the probability that an event of a class got just as far.

        Parameters
        ----------
        lens : str
        reached : str
            "found" or the last stage that it reached.
        """
        last = -1 if reached == "found" else STAGES.index(reached)
        chance = [getattr(self, stage).get(lens, 1.0) if getattr(self, stage) else 1.0 for stage in STAGES]
        # a follow-up that gave no mass leaves no trace in a table: both fail together
        failed = {-1: chance[:1] if self.parallax else chance[1:], 0: chance[1:], 1: chance[2:], 2: []}[last]
        declared = {-1: self.declared, 0: self.followed or self.mass, 1: self.mass, 2: False}[last]
        return float(np.prod(chance[: last + 1]) * (1.0 - np.prod(failed) if declared else 1.0))

    def kept(self, lens):
        """Return the probability that a found event of a class is in the sample."""
        out = 1.0
        if self.listed != "found":
            for stage in STAGES[: STAGES.index(self.listed) + 1]:
                out *= getattr(self, stage).get(lens, 1.0) if getattr(self, stage) else 1.0
        return out

    @property
    def declared(self):
        """Whether any probability is."""
        return any(getattr(self, s) for s in STAGES)

    def to_dict(self):
        """Return the declarations."""
        return {**{s: dict(getattr(self, s)) for s in STAGES}, "listed": self.listed}
