"""A thousand trials of every case: how often the intervals hold the truth, and how far off the readings are.

python -m tests.bench.coverage [TRIALS]
"""

import sys

import numpy as np

from monitord.measure.carrier import CarrierMeter
from monitord.measure.modulation import ModulationMeter
from tests.trials import bank_of, measured, programmes, received, tones

ROWS = 100
HOPS = 110
C_N0_DBHZ = (50, 60, 65, 70, 80, 90, 100)


def errors(kind: str, depth: float, c_n0_dbhz: float, rng: np.random.Generator) -> dict[str, np.ndarray]:
    """Errors and interval half-widths of one batch, name -> (2, trials)."""
    bank = bank_of(ROWS)
    if kind == "tone":
        modulation, positive = tones(bank, HOPS, depth, rng), np.full(ROWS, depth)
    else:
        modulation, positive = programmes(bank, HOPS, depth, rng)
    offset_hz = rng.uniform(-50, 50, ROWS)
    wave = received(bank, modulation, offset_hz, c_n0_dbhz, rng)
    last = measured(bank, wave, (CarrierMeter, ModulationMeter))[-1]
    peak = last["modulation_peak_uncertainty_ratio"]
    return {
        "level": np.stack([last["carrier_level_dbfs"] + 20, last["carrier_level_uncertainty_db"]]),
        "offset": np.stack(
            [
                last["carrier_frequency_offset_hertz"] - offset_hz,
                last["carrier_frequency_uncertainty_hertz"],
            ]
        ),
        "positive peak": np.stack([last["modulation_positive_peak_ratio"] - positive, peak]),
        "negative peak": np.stack([last["modulation_negative_peak_ratio"] - depth, peak]),
    }


def main(trials: int) -> None:
    """Print a line for each case and quantity: share inside, and the error that 95 % stay below."""
    rng = np.random.default_rng(1)
    for kind in ("tone", "programme"):
        for depth in (0.3, 0.7, 1.1):
            for c_n0_dbhz in C_N0_DBHZ:
                batches = [errors(kind, depth, c_n0_dbhz, rng) for _ in range(-(-trials // ROWS))]
                for name in batches[0]:
                    error, width = np.concatenate([batch[name] for batch in batches], axis=1)
                    if np.isfinite(error).all():
                        inside = 100 * np.mean(np.abs(error) <= width)
                        most = np.quantile(np.abs(error), 0.95)
                        case = f"{kind:9s} {depth:.1f} {c_n0_dbhz:4d} dB-Hz  {name:13s}"
                        print(f"{case} {inside:5.1f} % inside, 95 % of errors below {most:.2g}")


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 1000)
