"""Orbits in the turning bar: a time-transformed leapfrog on 16 lanes at a time.

State: position x in the bar's frame and canonical momentum p, which is the inertial velocity written in
the bar's axes, so that H = p^2 / 2 - omega L_z + Phi(x). Its first two terms move a body on a straight
line seen from turning axes, which is exact at any step, and the bar needs no trigonometry per step.

Steps follow Mikkola & Aarseth (2002, Celest. Mech. Dyn. Astron. 84, 343): dt = ds / W, where W follows
Om(r) = 1 / sqrt(r^2 + SOFT^2) + 1 / FAR along the orbit. The scheme is of second order, reversible, and has
no drift in energy. The constant 1 / FAR keeps W positive on orbits that escape. Time is in kpc / (km/s).
"""

import math

import numpy as np

from ._jit import kernel
from .potential import LANES, acceleration_at, add_lane_accelerations, potential_at

__all__ = [
    "ROWS",
    "TIME",
    "energies",
    "follow",
    "leapfrog",
    "load",
    "release",
    "take_steps",
]

SOFT = 0.3  # kpc
FAR = 20.0  # kpc
#: rows of LANES numbers in a block's flat array; the first nine as `add_lane_accelerations` has them
ROWS = 14
_X, _Y, _Z, _AX, _AY, _AZ = (row * LANES for row in range(6))
PX, PY, PZ, WEIGHT, TIME = (row * LANES for row in range(9, 14))


@kernel
def _drift(s, omega, ds):
    """Move along straight lines for dt = ds / W, seen from axes that turn by omega dt."""
    for i in range(LANES):
        dt = ds / s[WEIGHT + i]
        half = 0.5 * omega * dt
        h2 = half * half
        # tan(half) to the fifth power of a step of at most a third of a radian: 1e-7
        t = half * (1.0 + h2 * (1.0 / 3.0 + h2 * (2.0 / 15.0 + h2 * (17.0 / 315.0))))
        d = 1.0 / (1.0 + t * t)
        c = (1.0 - t * t) * d
        n = 2.0 * t * d
        x = s[_X + i] + dt * s[PX + i]
        y = s[_Y + i] + dt * s[PY + i]
        s[_X + i] = c * x + n * y
        s[_Y + i] = c * y - n * x
        s[_Z + i] += dt * s[PZ + i]
        px = s[PX + i]
        s[PX + i] = c * px + n * s[PY + i]
        s[PY + i] = c * s[PY + i] - n * px
        s[TIME + i] += dt


@kernel
def _kick(kinds, pars, s, ds):
    """Change p for dt = ds / Om(x), and W by the change of Om along the mean motion."""
    for i in range(LANES):
        s[_AX + i] = 0.0
        s[_AY + i] = 0.0
        s[_AZ + i] = 0.0
    add_lane_accelerations(kinds, pars, s)
    for i in range(LANES):
        x, y, z = s[_X + i], s[_Y + i], s[_Z + i]
        inverse2 = 1.0 / (x * x + y * y + z * z + SOFT * SOFT)
        inverse = math.sqrt(inverse2)
        dt = ds / (inverse + 1.0 / FAR)
        half = 0.5 * dt
        px = s[PX + i] + half * s[_AX + i]
        py = s[PY + i] + half * s[_AY + i]
        pz = s[PZ + i] + half * s[_AZ + i]
        s[WEIGHT + i] -= dt * inverse2 * inverse * (x * px + y * py + z * pz)
        s[PX + i] = px + half * s[_AX + i]
        s[PY + i] = py + half * s[_AY + i]
        s[PZ + i] = pz + half * s[_AZ + i]


@kernel
def take_steps(kinds, pars, omega, ds, s, n):
    """Advance a block by n steps; neighbouring half drifts are done as one.

    Parameters
    ----------
    kinds, pars
        As for `potential_at`.
    omega : float  [km/s/kpc]
        Angular speed of the bar's frame about +z.
    ds : float  [kpc/(km/s) per kpc]
        Step; negative runs backward.
    s : ndarray, shape (ROWS * LANES,)
        Changed in place.
    n : int
        At least 1.
    """
    _drift(s, omega, 0.5 * ds)
    for _ in range(n - 1):
        _kick(kinds, pars, s, ds)
        _drift(s, omega, ds)
    _kick(kinds, pars, s, ds)
    _drift(s, omega, 0.5 * ds)


@kernel
def load(states, first, s):
    """Fill a block from rows of x, y, z, p_x, p_y, p_z at `first` and on; the last row fills what is left over.

    Returns
    -------
    int
        Number of lanes that hold a row of their own.
    """
    used = min(LANES, states.shape[0] - first)
    for i in range(LANES):
        j = first + min(i, used - 1)
        x, y, z = states[j, 0], states[j, 1], states[j, 2]
        s[_X + i] = x
        s[_Y + i] = y
        s[_Z + i] = z
        s[PX + i] = states[j, 3]
        s[PY + i] = states[j, 4]
        s[PZ + i] = states[j, 5]
        s[WEIGHT + i] = 1.0 / math.sqrt(x * x + y * y + z * z + SOFT * SOFT) + 1.0 / FAR
        s[TIME + i] = 0.0
    return used


@kernel
def release(s, i, out):
    """Write lane i's x, y, z, p_x, p_y, p_z to `out`."""
    out[0] = s[_X + i]
    out[1] = s[_Y + i]
    out[2] = s[_Z + i]
    out[3] = s[PX + i]
    out[4] = s[PY + i]
    out[5] = s[PZ + i]


@kernel
def leapfrog(kinds, pars, omega, dt, state):
    """One ordinary leapfrog step of duration dt for a single state of six numbers, in place."""
    for half in range(2):
        x = state[0] + 0.5 * dt * state[3]
        y = state[1] + 0.5 * dt * state[4]
        c, n = math.cos(0.5 * omega * dt), math.sin(0.5 * omega * dt)
        px, py = state[3], state[4]
        state[0], state[1] = c * x + n * y, c * y - n * x
        state[2] += 0.5 * dt * state[5]
        state[3], state[4] = c * px + n * py, c * py - n * px
        if half == 0:
            ax, ay, az = acceleration_at(kinds, pars, state[0], state[1], state[2])
            state[3] += dt * ax
            state[4] += dt * ay
            state[5] += dt * az


@kernel
def _finish(kinds, pars, omega, ds, time, s, used, done, states, first):
    """Take the lanes that the next step might carry past `time` to it by two ordinary steps; return how many."""
    finished = 0
    for i in range(used):
        rest = abs(time) - abs(s[TIME + i])
        # Om changes by less than half within a step
        if not done[i] and rest < 1.5 * ds * min(1.0 / s[WEIGHT + i], FAR):
            release(s, i, states[first + i])
            for _ in range(2):
                leapfrog(kinds, pars, omega, math.copysign(0.5 * rest, time), states[first + i])
            done[i] = True
            finished += 1
    return finished


@kernel
def follow(kinds, pars, omega, ds, states, time):
    """Integrate many bodies for the same time, in place.

    Parameters
    ----------
    kinds, pars, omega
        As for `take_steps`.
    ds : float
        Step of the transformed leapfrog, positive.
    states : ndarray, shape (n, 6)
        x, y, z [kpc] and p_x, p_y, p_z [km/s] in the bar's frame.
    time : float  [kpc/(km/s)]
        Negative runs backward. The last, shortened part is done in two ordinary leapfrog steps.

    Returns
    -------
    int
        Steps taken by all bodies together.
    """
    s = np.zeros(ROWS * LANES)
    sign = 1.0 if time >= 0 else -1.0
    done = np.zeros(LANES, dtype=np.bool_)
    total = 0
    for first in range(0, states.shape[0], LANES):
        used = load(states, first, s)
        done[:] = False
        left = used
        while left > 0:
            # no step can be longer than ds * FAR, so this many steps cannot overshoot in any lane
            safe = 1e9
            for i in range(used):
                if not done[i]:
                    safe = min(safe, (abs(time) - abs(s[TIME + i])) / (ds * FAR))
            n = max(1, int(safe) - 1)
            if n == 1:
                left -= _finish(kinds, pars, omega, ds, time, s, used, done, states, first)
            if left > 0:
                take_steps(kinds, pars, omega, sign * ds, s, n)
                total += n * left
    return total


@kernel
def energies(kinds, pars, omega, states, out):
    """Write the energy p^2 / 2 + Phi and Jacobi's integral of each state; out has shape (n, 2) [(km/s)^2]."""
    for j in range(states.shape[0]):
        x, y, z, px, py, pz = states[j]
        e = 0.5 * (px * px + py * py + pz * pz) + potential_at(kinds, pars, x, y, z)
        out[j, 0] = e
        out[j, 1] = e - omega * (x * py - y * px)
