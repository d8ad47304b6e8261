"""Where a thing is at an instant: closed forms, so a scene can be drawn at any time and its speed has a bound."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from enhance.simulate.sampling import OVERSAMPLE

Pair = tuple[float, float]


@dataclass(frozen=True)
class Motion:
    """Drift, sway, turn and zoom of one thing; all of it a closed form of time.

    Parameters
    ----------
    origin : tuple of float
        Frame position (x, y) the thing's own centre has at rest, pixels.
    velocity : tuple of float
        Steady drift, pixels a second.
    sway : tuple of float
        Amplitude of a sine on top (x, y), pixels; `sway_rate` radians a second, `sway_phase` radians (x, y).
    angle : float
        Radians at time zero; `spin` radians a second on top; `swing` radians of a sine at `swing_rate`.
    zoom : float
        Amplitude of a sine on the logarithm of the scale, at `zoom_rate`.
    wrap : tuple of float or None
        (low x, high x, low y, high y): a position that leaves on one side comes back on the other. Choose it so that
        the jump lies outside the frame.
    """

    origin: Pair = (0.0, 0.0)
    velocity: Pair = (0.0, 0.0)
    sway: Pair = (0.0, 0.0)
    sway_rate: Pair = (0.0, 0.0)
    sway_phase: Pair = (0.0, 0.0)
    angle: float = 0.0
    spin: float = 0.0
    swing: float = 0.0
    swing_rate: float = 0.0
    zoom: float = 0.0
    zoom_rate: float = 0.0
    wrap: tuple[float, float, float, float] | None = None

    def position(self, t_s: float) -> Pair:
        """Frame position (x, y) of the centre at `t_s`, pixels."""
        x = self.origin[0] + self.velocity[0] * t_s
        y = self.origin[1] + self.velocity[1] * t_s
        x += self.sway[0] * math.sin(self.sway_rate[0] * t_s + self.sway_phase[0])
        y += self.sway[1] * math.sin(self.sway_rate[1] * t_s + self.sway_phase[1])
        if self.wrap:
            x0, x1, y0, y1 = self.wrap
            x, y = x0 + (x - x0) % (x1 - x0), y0 + (y - y0) % (y1 - y0)
        return x, y

    def scale(self, t_s: float) -> float:
        """Size against rest at `t_s`."""
        return math.exp(self.zoom * math.sin(self.zoom_rate * t_s))

    def matrix(self, t_s: float, centre: Pair) -> NDArray[np.float64]:
        """Map frame pixels to texels.

        Parameters
        ----------
        t_s : float
        centre : tuple of float
            Texel (u, v) of the thing's own centre.

        Returns
        -------
        ndarray of float64, shape (2, 3)
        """
        x, y = self.position(t_s)
        turn = self.angle + self.spin * t_s + self.swing * math.sin(self.swing_rate * t_s)
        step = OVERSAMPLE / self.scale(t_s)
        cos, sin = step * math.cos(turn), step * math.sin(turn)
        # texel = centre + R(-turn) (pixel - position) * OVERSAMPLE / scale
        return np.array(
            [[cos, sin, centre[0] - cos * x - sin * y], [-sin, cos, centre[1] + sin * x - cos * y]], dtype=np.float64
        )

    def speed(self, radius: float) -> float:
        """Upper bound of the speed of any point within `radius` pixels of the centre, pixels a second."""
        drift = math.hypot(*self.velocity)
        sway = math.hypot(self.sway[0] * self.sway_rate[0], self.sway[1] * self.sway_rate[1])
        turn = abs(self.spin) + abs(self.swing * self.swing_rate) + abs(self.zoom * self.zoom_rate)
        return drift + sway + turn * radius * math.exp(abs(self.zoom))


@dataclass(frozen=True)
class Fall(Motion):
    """A drop's fall, begun anew at the top again and again.

    Parameters
    ----------
    gravity : float
        Pixels a second squared.
    period_s : float
        Time of one fall; `start` is the share of it that has passed at time zero.
    """

    gravity: float = 0.0
    period_s: float = 1.0
    start: float = 0.0

    def position(self, t_s: float) -> Pair:
        """Frame position (x, y) of the centre at `t_s`, pixels."""
        fallen = (t_s / self.period_s + self.start) % 1.0 * self.period_s
        # s = v t + g t^2 / 2
        return (
            self.origin[0] + self.velocity[0] * fallen,
            self.origin[1] + self.velocity[1] * fallen + 0.5 * self.gravity * fallen**2,
        )

    def speed(self, radius: float) -> float:
        """Upper bound of the speed, pixels a second."""
        return math.hypot(self.velocity[0], self.velocity[1] + self.gravity * self.period_s)
