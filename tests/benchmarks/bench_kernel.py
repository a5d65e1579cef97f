"""Overlap-add against scipy.signal.oaconvolve, side by side in one run; asserts nothing.

    python tests/benchmarks/bench_kernel.py [--json]

Channel-major input, equal precision on both sides, one thread, at least 2^22 samples in all,
medians of 5. The taps' own transform, done once a kernel, is not part of our time. A ratio
above 1 means that ours is faster.
"""

from __future__ import annotations

import json
import sys
import time
from fractions import Fraction

import numpy as np
from scipy.signal import oaconvolve

from pipeline_filters.chain.blocks import block_rule
from pipeline_filters.kernels.overlap_add import OverlapAdd
from pipeline_filters.spec.model import Blocks


def timed(work, *given) -> float:
    began = time.perf_counter()
    work(*given)
    return time.perf_counter() - began


def main() -> None:
    rng = np.random.default_rng(1)
    rows = []
    for dtype in (np.float64, np.float32):
        for taps_count in (31, 501, 2001, 20001):
            taps = rng.standard_normal(taps_count)
            hop, transform = block_rule(taps_count, Blocks(), Fraction(1), waiting=0, result="r")
            for channels in (1, 16, 64):
                samples = max((1 << 22) // channels, 2 * hop)
                x = rng.standard_normal((channels, samples)).astype(dtype)
                h = taps.astype(dtype)[None]

                def ready(rows=channels, taps=taps, hop=hop, transform=transform, dtype=dtype):
                    return OverlapAdd(
                        rows,
                        taps,
                        hop=hop,
                        transform=transform,
                        start=0,
                        emit_from=0,
                        dtype=np.dtype(dtype),
                    )

                def ours(kernel, x=x):
                    kernel.push(x)
                    kernel.finish()

                def theirs(x=x, h=h):
                    oaconvolve(x, h, axes=1)

                pairs = [(timed(ours, ready()), timed(theirs)) for _ in range(5)]
                mine, other = np.median(pairs, axis=0)
                rows.append(
                    {
                        "precision": np.dtype(dtype).name,
                        "taps": taps_count,
                        "channels": channels,
                        "ours_ns": mine / x.size * 1e9,
                        "oaconvolve_ns": other / x.size * 1e9,
                        "ratio": other / mine,
                    }
                )
    ratios = [row["ratio"] for row in rows]
    mean = float(np.exp(np.mean(np.log(ratios))))
    if "--json" in sys.argv:
        print(json.dumps({"rows": rows, "geometric_mean": mean, "least": min(ratios)}))
        return
    for row in rows:
        print(
            f"{row['precision']} P {row['taps']:6d} channels {row['channels']:3d}: "
            f"{row['ours_ns']:6.2f} ns a sample, oaconvolve {row['oaconvolve_ns']:6.2f}, "
            f"ratio {row['ratio']:.2f}"
        )
    print(f"geometric mean {mean:.2f}, least {min(ratios):.2f}")


if __name__ == "__main__":
    main()
