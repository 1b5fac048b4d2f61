"""From places and velocities at birth to places and velocities later: orbits in the turning bar.

Places are Galactocentric, velocities inertial; both are turned so that the bar stands as it does today,
whatever time has passed. The gravity is steady in that frame.
"""

import astropy.units as u
import numpy as np

from ..errors import InputError
from ..kernels import orbits as kernels
from ..units import KPC_PER_MYR, strip

__all__ = ["STEP_SPEED", "bar_states", "bound", "galactocentric", "integrate", "states_energies", "step"]

#: speed [km/s] that turns the dimensionless step into time: eta = 0.1 moves a body at this speed by a tenth of 1/Om
STEP_SPEED = 233.0


def step(eta):
    """Return the kernel's step for a dimensionless one.

    Parameters
    ----------
    eta : float
        Path of a body at 233 km/s in one step over 1/Om(r), which is r inside and 20 kpc far out; 0.001 to 0.5.

    Returns
    -------
    float

    Raises
    ------
    InputError
        `eta` out of range.
    """
    if not 1e-3 <= eta <= 0.5:
        raise InputError(f"eta: {eta} given, must be within 0.001 to 0.5 (0.1 keeps energies to about 1e-3)")
    return eta / STEP_SPEED


def bar_states(potential, place, velocity):
    """Turn Galactocentric vectors into the kernel's rows of x, y, z, p_x, p_y, p_z in the bar's frame.

    Parameters
    ----------
    potential : Potential
    place : ndarray, shape (n, 3)  [kpc]
    velocity : ndarray, shape (n, 3)  [km/s]
        Inertial.

    Returns
    -------
    ndarray, shape (n, 6)
    """
    return np.hstack([potential.to_bar_frame(place), potential.to_bar_frame(velocity)])


def galactocentric(potential, states):
    """Undo `bar_states`: return place [kpc] and velocity [km/s], each of shape (n, 3)."""
    return potential.from_bar_frame(states[:, :3]), potential.from_bar_frame(states[:, 3:])


def states_energies(potential, states):
    """Return energy and Jacobi's integral of rows in the bar's frame, shape (n, 2) [(km/s)^2]."""
    out = np.empty((states.shape[0], 2))
    kernels.energies(*potential.packed, potential.omega, np.ascontiguousarray(states), out)
    return out


def bound(potential, place, velocity):
    """Say which bodies have negative energy now.

    Parameters
    ----------
    potential : Potential
    place, velocity : Quantity, shape (n, 3)
        Galactocentric.

    Returns
    -------
    ndarray of bool, shape (n,)
    """
    return states_energies(potential, bar_states(potential, *_vectors(place, velocity)))[:, 0] < 0


def integrate(potential, place, velocity, time, eta=0.1):
    """Follow bodies for a time; the bar turns underneath.

    Parameters
    ----------
    potential : Potential
    place, velocity : Quantity, shape (n, 3)
        Galactocentric place and inertial velocity.
    time : Quantity
        Common to all; negative goes back in time.
    eta : float
        Step, see `step`. Energies scatter by about 0.1 eta^2 of the squared circular speed, in the median by less.

    Returns
    -------
    place, velocity : Quantity, shape (n, 3)
        As seen when the bar stands at today's angle: the inertial result turned by minus the bar's turn meanwhile.

    Raises
    ------
    InputError
        Wrong shape, unit or step.
    """
    place, velocity = _vectors(place, velocity)
    time = strip("time", time, "Myr", shape=()) * KPC_PER_MYR
    states = bar_states(potential, place, velocity)
    # neighbours in energy take about the same number of steps, so few lanes of a block idle
    order = np.argsort(states_energies(potential, states)[:, 0])
    sorted_states = np.ascontiguousarray(states[order])
    kernels.follow(*potential.packed, potential.omega, step(eta), sorted_states, time)
    states[order] = sorted_states
    place, velocity = galactocentric(potential, states)
    return place * u.kpc, velocity * (u.km / u.s)


def _vectors(place, velocity):
    place, velocity = strip("place", place, "kpc"), strip("velocity", velocity, "km/s")
    for name, array in (("place", place), ("velocity", velocity)):
        if np.ndim(array) != 2 or np.shape(array)[1] != 3:
            raise InputError(f"{name}: shape {np.shape(array)} given, (n, 3) needed")
    if len(place) != len(velocity):
        raise InputError(f"velocity: {len(velocity)} rows given for {len(place)} places")
    return place, velocity
