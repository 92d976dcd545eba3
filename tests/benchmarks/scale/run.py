"""Five hundred simulated spectra without any scale: how often is it found, refused, or wrong with confidence?

    python tests/benchmarks/scale/run.py [--spectra 500] [--first 0] [--bare]

Gains 2 to 100 eV a channel, 256 to 16,384 channels, offsets within 1 keV, 120 to 230 eV wide, 3e4 to 3e6 counts,
two to five elements with K and L lines, tube lines from absent to dominant. `--bare` gives away neither anode nor
voltage. Prints one line per spectrum that is refused or wrong, and a summary.
"""

from __future__ import annotations

import argparse
import sys
import time
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[2] / "prepare"))
from synthetic import made, tube

from xrfid.errors import Untrustworthy
from xrfid.instrument import Instrument
from xrfid.prepare.find_scale import find_scale
from xrfid.spectrum import EnergyScale

ELEMENTS = "Al Si S Cl K Ca Ti V Cr Mn Fe Co Ni Cu Zn As Se Br Rb Sr Zr Nb Mo Ag Cd Sn Sb Ba La W Au Hg Pb Bi".split()
GAIN_TOLERANCE = 0.002


def drawn(seed: int):
    """A random case: its spectrum, true scale, tube and a description."""
    rng = np.random.default_rng(seed)
    anode = str(rng.choice(["Rh", "Ag", "Mo", "W", "Cu", "Pd"]))
    voltage = float(rng.choice([15, 20, 30, 40, 50]))
    n_channels = int(rng.choice([256, 512, 1024, 2048, 4096, 8192, 16384]))
    span = rng.uniform(0.8, 1.3) * voltage
    gain = float(np.clip(span / n_channels, 0.002, 0.1))
    offset = float(rng.uniform(-1, 1) if rng.random() < 0.5 else rng.normal(0, 0.03))
    chosen = rng.choice(ELEMENTS, rng.integers(2, 6), replace=False)
    light = rng.random() < 0.5
    weights = 10 ** rng.uniform(-1.5, 0, chosen.size)
    weights *= (0.1 if light else 1.0) / weights.sum()
    composition = {str(e): float(w) for e, w in zip(chosen, weights, strict=True)}
    if light:
        composition |= {"C": 0.5, "O": 0.4}
    total = 10 ** rng.uniform(4.5, 6.5)
    scale = EnergyScale(offset, gain)
    spectrum = made(composition, scale, n_channels, total, rng.uniform(120, 230), anode, voltage,
                    scatter=10 ** rng.uniform(-1.5, 0.5), pile_up=10 ** rng.uniform(-4, -2), seed=seed)  # fmt: skip
    words = f"{anode} {voltage:g} kV, {'+'.join(chosen)}, {total:.0f} counts, {n_channels} channels"
    return spectrum, scale, tube(anode, voltage), words


def main() -> None:
    """Run the measurement."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--spectra", type=int, default=500)
    parser.add_argument("--first", type=int, default=0)
    parser.add_argument("--bare", action="store_true")
    options = parser.parse_args()
    right = refused = wrong = inexact = 0
    times = []
    for seed in range(options.first, options.first + options.spectra):
        spectrum, scale, instrument, words = drawn(seed)
        start = time.process_time()
        try:
            found = find_scale(spectrum.counts, Instrument() if options.bare else instrument).best.scale
        except Untrustworthy as error:
            refused += 1
            print(f"{seed}: refused ({words}): {error}", flush=True)
            continue
        finally:
            times.append(time.process_time() - start)
        off = found.gain_kev / scale.gain_kev - 1.0
        if abs(off) <= GAIN_TOLERANCE:
            right += 1
        elif abs(off) < 0.01 and abs(found.offset_kev - scale.offset_kev) < 0.1:
            inexact += 1
            print(f"{seed}: inexact, gain off by {off:+.2%} ({words})", flush=True)
        else:
            wrong += 1
            print(f"{seed}: WRONG, gain off by {off:+.2%} ({words})", flush=True)
    print(
        f"{right} right within {GAIN_TOLERANCE:.1%}, {inexact} right lines but less exact, {refused} refused, "
        f"{wrong} wrong with confidence"
    )
    print(f"CPU time: median {np.median(times):.2f} s, greatest {np.max(times):.2f} s")


if __name__ == "__main__":
    main()
