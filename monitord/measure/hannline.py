"""A line in a Hann-windowed spectrum: its shape, and where it stands between the bins."""

import numpy as np

from monitord.blocks import Precise


def line_shape(away: Precise) -> Precise:
    """Hann spectrum of a line of height 1, `away` bins from it, phase referred to the middle (Harris 1978, eq. 27)."""
    return np.asarray(np.sinc(away) + (np.sinc(away - 1) + np.sinc(away + 1)) / 2)


def between_bins(below: Precise, top: Precise, above: Precise) -> tuple[Precise, Precise]:
    """How far from its highest bin a line stands, in bins, and its height (Rife and Vincent 1970: (2 r - 1) / (r + 1)).

    below, top, above: magnitudes of the highest bin and its neighbours.
    """
    ratio = np.maximum(below, above) / top
    away = np.clip((2 * ratio - 1) / (ratio + 1), 0, 0.5)
    height = top * (1 - np.square(away)) / np.sinc(away)
    return np.where(above > below, away, -away), np.asarray(height)
