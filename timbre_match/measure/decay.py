r"""One or two damped exponentials in the noise of a band: the decay of a partial.

A partial in its own band, turned down to zero frequency, is

.. math:: y(t) = \sum_{i=1}^{R} c_i\, e^{s_i t} + \text{noise}, \qquad s_i = -\alpha_i + j\,\omega_i,

with R = 1 for a plain decay, and R = 2 where two strings or the two polarisations of one string share the partial
(Weinreich 1977, J. Acoust. Soc. Am. 62:1474). In white noise the maximum-likelihood estimate is the least-squares fit;
the amplitudes c_i follow from the s_i by linear least squares and drop out of the search (variable projection: Golub &
Pereyra 1973, SIAM J. Numer. Anal. 10:413, with the Jacobian of Kaufman 1975, BIT 15:49). The model goes on into the
noise, so that a partial which reaches the floor needs no cut. All partials of a note are fitted at once.
"""

from dataclasses import dataclass

import numpy as np
import scipy.fft
from numpy.typing import NDArray

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

SLOWEST_T60_S = 60.0
T60_LOG = float(np.log(1000.0))
"""T60 times the decay rate alpha: an amplitude falls by 60 dB when it falls to a thousandth."""
_RATES = 8
_ROUNDS = 15
_DONE = 1e-7


@dataclass(frozen=True, kw_only=True, slots=True, eq=False)
class Decays:
    """Fits of R damped exponentials to P partials.

    Attributes
    ----------
    s : complex array, shape (P, R)
        Decay rate (negative real part, 1/s) and angular frequency (imaginary part, rad/s) of each component.
    c : complex array, shape (P, R)
        Amplitude and phase at time zero.
    rest : float64 array, shape (P,)
        Sum of squares that the fit leaves.
    """

    s: Complex
    c: Complex
    rest: Real

    def at(self, time_s: Real) -> Complex:
        """The model at any times, shape (P, n)."""
        return np.asarray(np.matmul(self.c[:, None, :], exponentials(self.s, time_s))[:, 0])

    def chosen(self, rows: NDArray[np.bool_] | NDArray[np.int64]) -> "Decays":
        """The fits of some of the partials."""
        return Decays(s=self.s[rows], c=self.c[rows], rest=self.rest[rows])


def exponentials(s: Complex, time_s: Real) -> Complex:
    """exp(s t) at equal steps of time, shape (P, R, n), for s of shape (P, R)."""
    count, per = len(time_s), int(np.ceil(np.sqrt(len(time_s))))
    step_s = float(time_s[1] - time_s[0]) if count > 1 else 0.0
    # n values as products of a few: a tenth of the work of as many exponentials.
    coarse = np.exp(s[..., None] * (time_s[0] + step_s * per * np.arange(-(-count // per))))
    fine = np.exp(s[..., None] * (step_s * np.arange(per)))
    return np.asarray((coarse[..., :, None] * fine[..., None, :]).reshape(*s.shape, -1)[..., :count])


def search_one(time_s: Real, y: Complex, widest_hz: float, fastest_t60_s: float) -> Complex:
    """Where to begin: the decay rate and frequency that explain most, on a coarse grid.

    Parameters
    ----------
    time_s : array, shape (n,), at equal steps
    y : array, shape (P, n)
    widest_hz : float
        How far from zero the frequency may lie.
    fastest_t60_s : float
        The shortest time in which it may fall by 60 dB.

    Returns
    -------
    complex array, shape (P,)
    """
    step_s = float(time_s[1] - time_s[0])
    size = int(scipy.fft.next_fast_len(len(time_s)))
    freq_hz = scipy.fft.fftfreq(size, step_s)
    inside = np.flatnonzero(np.abs(freq_hz) <= widest_hz)
    rates = T60_LOG / np.geomspace(fastest_t60_s, min(SLOWEST_T60_S, 30.0 * float(time_s[-1])), _RATES)
    best = np.full(len(y), -1.0)
    found = np.zeros(len(y), dtype=np.complex128)
    for rate in rates:
        shape = np.exp(-rate * (time_s - time_s[0]))
        score = np.abs(scipy.fft.fft(y * shape, size, axis=1)[:, inside]) ** 2 / float(shape @ shape)
        place = score.argmax(axis=1)
        height = score[np.arange(len(y)), place]
        better = height > best
        best = np.where(better, height, best)
        found = np.where(better, -rate + 2j * np.pi * freq_hz[inside][place], found)
    return found


def fit_decays(
    time_s: Real, y: Complex, start: Complex, widest_hz: float, fastest_t60_s: float, *, rounds: int = _ROUNDS
) -> Decays:
    """Fit R damped exponentials to each of P partials, from given starting values (Levenberg-Marquardt).

    Parameters
    ----------
    time_s : array, shape (n,)
    y : array, shape (P, n)
    start : complex array, shape (P, R)
    widest_hz : float
        How far from zero a frequency may lie.
    fastest_t60_s : float
        The shortest time in which a component may fall by 60 dB.
    rounds : int
        At most so many steps.

    Returns
    -------
    Decays
    """
    s = _within(start, widest_hz, fastest_t60_s)
    energy = np.einsum("pn,pn->p", y.real, y.real) + np.einsum("pn,pn->p", y.imag, y.imag)
    damping = np.full(len(y), 1e-3)
    c, rest, slope, bend = _project(time_s, y, energy, s)
    active = np.arange(len(y))
    for _ in range(rounds):
        if not len(active):
            break
        diagonal = np.einsum("prr->pr", bend[active]).real * (1.0 + damping[active, None])
        system = bend[active].copy()
        for r in range(s.shape[1]):
            system[:, r, r] = diagonal[:, r] + 1e-300
        move = np.linalg.solve(system, slope[active][..., None])[..., 0]
        tried = _within(s[active] + move, widest_hz, fastest_t60_s)
        new_c, new_rest, new_slope, new_bend = _project(time_s, y[active], energy[active], tried)
        better = new_rest <= rest[active]
        gain = np.where(better, rest[active] - new_rest, np.inf)
        rows = active[better]
        s[rows], c[rows], rest[rows] = tried[better], new_c[better], new_rest[better]
        slope[rows], bend[rows] = new_slope[better], new_bend[better]
        damping[active] = np.where(better, damping[active] / 5.0, damping[active] * 8.0)
        settled = (gain <= _DONE * rest[active]) | (damping[active] > 1e8)
        active = active[~settled]
    return Decays(s=s, c=c, rest=rest)


def _within(s: Complex, widest_hz: float, fastest_t60_s: float) -> Complex:
    rate = np.clip(-s.real, T60_LOG / SLOWEST_T60_S, T60_LOG / fastest_t60_s)
    turn = np.clip(s.imag, -2.0 * np.pi * widest_hz, 2.0 * np.pi * widest_hz)
    return np.asarray(-rate + 1j * turn)


def _project(time_s: Real, y: Complex, energy: Real, s: Complex) -> tuple[Complex, Real, Complex, Complex]:
    """Amplitudes, sum of squares left, and the step equations for the s_i, from one table of inner products."""
    count = s.shape[1]
    columns = np.empty((len(s), 2 * count, len(time_s)), dtype=np.complex128)
    columns[:, :count] = exponentials(s, time_s)
    np.multiply(columns[:, :count], time_s, out=columns[:, count:])
    conjugate = columns.conj()
    table = conjugate @ columns.transpose(0, 2, 1)
    onto = np.matmul(conjugate, y[..., None])[..., 0]
    own = table[:, :count, :count].copy()
    for r in range(count):
        # Two components that fall together leave their sum determined, not their difference.
        own[:, r, r] *= 1.0 + 1e-9
    cross = table[:, :count, count:]
    solved = np.linalg.solve(own, np.concatenate([onto[:, :count, None], cross], axis=2))
    c, through = solved[:, :, 0], solved[:, :, 1:]
    rest = energy - np.einsum("pr,pr->p", c.conj(), onto[:, :count]).real
    # The derivative's part that the amplitudes cannot take up.
    free = table[:, count:, count:] - cross.conj().transpose(0, 2, 1) @ through
    free_onto = onto[:, count:] - np.einsum("prq,pr->pq", cross.conj(), c)
    slope = c.conj() * free_onto
    bend = c.conj()[:, :, None] * free * c[:, None, :]
    return c, np.maximum(rest, 0.0), slope, bend
