"""How fast the physics is: 10^7 soundings through footprints, resolutions and counts, one core.

Run it by itself: ``python tests/bench/bench_physics.py``. Soundings pass in batches that stay in
the processor's cache, as they do in the audit, with the ping's values once per ping. Time is
processor time, so that a second core would not flatter it.
"""

from __future__ import annotations

import argparse
import time

import numpy as np

from qa.physics import beams, hits, pulse

BEAMS = 400
PINGS_PER_BATCH = 128
TARGET = 2.0


def run(soundings: int, dtype: type) -> tuple[float, int]:
    """Seconds of processor time taken, and soundings that went through."""
    random = np.random.default_rng(7)
    batches = -(-soundings // (BEAMS * PINGS_PER_BATCH))
    size = (PINGS_PER_BATCH, BEAMS)
    fan = np.linspace(-65.0, 65.0, BEAMS)
    inputs = [
        (
            (fan + random.normal(0.0, 0.3, size)).astype(dtype),
            random.uniform(20.0, 60.0, size).astype(dtype),
            random.normal(0.0, 3.0, (PINGS_PER_BATCH, 1)).astype(dtype),
            random.uniform(0.3, 0.6, (PINGS_PER_BATCH, 1)).astype(dtype),
        )
        for _ in range(8)
    ]
    began = time.process_time()
    done = 0
    for number in range(batches):
        angle, height, roll, spacing = inputs[number % len(inputs)]
        slant_range = beams.slant_range_from_height(height, angle)
        width = beams.steered_beamwidth(1.0, beams.array_angle(angle, roll))
        along = beams.footprint_along(slant_range, 1.0)
        across = beams.footprint_across(height, angle, width)
        resolution = pulse.range_resolution_cw(60e-6, np.full((PINGS_PER_BATCH, 1), 1490.0, dtype))
        patch = beams.pulse_limited_across(slant_range, height, resolution)
        sure = hits.guaranteed_hits(TARGET, along, spacing)
        possible = hits.possible_hits(TARGET, along, spacing)
        assert across.shape == patch.shape == sure.shape == possible.shape == size
        assert across.dtype == patch.dtype == sure.dtype == dtype
        done += angle.size
    return time.process_time() - began, done


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--soundings", type=int, default=10_000_000)
    parser.add_argument("--times", type=int, default=3)
    options = parser.parse_args()
    for dtype in (np.float32, np.float64):
        taken = []
        for _ in range(options.times):
            seconds, done = run(options.soundings, dtype)
            taken.append(seconds)
        median = float(np.median(taken))
        print(
            f"{np.dtype(dtype).name}: {done:,} soundings in {median:.2f} s of one core "
            f"({done / median:,.0f} a second; each run: {', '.join(f'{t:.2f}' for t in taken)})"
        )


if __name__ == "__main__":
    main()
