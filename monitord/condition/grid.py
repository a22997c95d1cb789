"""The hop grid: how the source's samples are cut, and at what rate a bank of channels goes on.

A hop is 6 D samples, its FFT frame 8 D: D samples before and after each hop are shared with its
neighbours, which leaves a filter of 2 D + 1 taps room in the overlap (overlap-save). After the tuner a
bank's hop is `STEPS` equal steps, so that the carrier loop has whole steps.
"""

from dataclasses import dataclass

HOP_S = 0.1
STEPS = 24
STOP_BAND_DB = 110.0
_SMOOTH = (2, 3, 5, 7, 11)


def smooth(number: int) -> bool:
    """True if `number` has no prime factor above 11, which scipy.fft transforms at full speed."""
    for prime in _SMOOTH:
        while number % prime == 0:
            number //= prime
    return number == 1


@dataclass(frozen=True, slots=True)
class Grid:
    """The hop grid of a source.

    rate_hz: sample rate.
    margin: D, samples of overlap on each side of a hop.
    """

    rate_hz: float
    margin: int

    @classmethod
    def of(cls, rate_hz: float) -> "Grid":
        """The grid nearest to 0.1 s, moved by up to 1 % where that gives fast transforms."""
        ideal = HOP_S * rate_hz / 6
        near = range(max(1, int(ideal * 0.99)), int(ideal * 1.01) + 2)
        fast = [d for d in near if smooth(d) and abs(d - ideal) <= 0.01 * ideal]
        return cls(rate_hz, min(fast or near, key=lambda d: abs(d - ideal)))

    @property
    def hop(self) -> int:
        """Samples from one hop to the next."""
        return 6 * self.margin

    @property
    def frame(self) -> int:
        """Samples in the transform of one hop."""
        return 8 * self.margin

    @property
    def hop_s(self) -> float:
        """Seconds from one hop to the next."""
        return self.hop / self.rate_hz

    @property
    def transition_hz(self) -> float:
        """Width between pass band and stop band that 2 D + 1 Kaiser taps need (Kaiser 1974, N ~ (A-7.95)/14.36 df)."""
        return (STOP_BAND_DB - 7.95) / 14.36 * self.rate_hz / (2 * self.margin)


@dataclass(frozen=True, slots=True)
class Branch:
    """What a bank of equal channels does with the grid.

    pass_hz: half-width of the flat pass band: audio bandwidth and acquisition range.
    points: size of the inverse transform; its middle 6/8 are the hop.
    """

    grid: Grid
    pass_hz: float
    points: int

    @classmethod
    def of(cls, grid: Grid, bandwidth_hz: float, acquire_hz: float) -> "Branch":
        """At least 4.7 times the pass band: what the true-peak interpolation can stand on."""
        pass_hz = bandwidth_hz + acquire_hz + grid.rate_hz / grid.frame
        needed_hz = max(4.7 * (bandwidth_hz + acquire_hz), 2.2 * (pass_hz + grid.transition_hz))
        unit = 4 * STEPS // 3  # 6/8 of the points are whole steps, 1/8 is whole
        count = max(4, -int(-needed_hz * grid.frame / grid.rate_hz // unit))
        while not smooth(count):
            count += 1
        return cls(grid, pass_hz, unit * count)

    @property
    def rate_hz(self) -> float:
        """Sample rate of the bank's baseband."""
        return self.grid.rate_hz * self.points / self.grid.frame

    @property
    def frames(self) -> int:
        """Samples per hop of the bank's baseband."""
        return 6 * self.points // 8

    @property
    def noise_hz(self) -> float:
        """One-sided noise bandwidth of a row: pass band and half of the transition."""
        return self.pass_hz + self.grid.transition_hz / 2
