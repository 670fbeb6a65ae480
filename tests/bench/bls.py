#!/usr/bin/python3
"""Box least squares beside astropy's, one core each, same light curve and grid, best of three."""
import os
import pathlib
import subprocess
import time

os.environ['OMP_NUM_THREADS'] = '1'
import numpy as np  # noqa: E402
from astropy.timeseries import BoxLeastSquares  # noqa: E402

ROOT = pathlib.Path(__file__).resolve().parent.parent.parent
DRIVER = pathlib.Path(os.environ.get('EBBMARK_BUILD', ROOT / 'build/release'), 'tests/bench/bls_driver')
ROUNDS = 3


def measure(name, days, cadence, periods, durations, oversample):
    random = np.random.default_rng(1)
    at = np.arange(0, days, cadence)
    flux = 1 + 1e-3 * random.normal(size=at.size) - 3e-3 * (at % 3.7 < 0.1)
    error = np.full(at.size, 1e-3)
    stream = b''.join(np.ascontiguousarray(part, float).tobytes() for part in (at, flux, error, periods, durations))
    words = [str(n) for n in (at.size, len(periods), len(durations), oversample, ROUNDS)]
    ours, power = map(float, subprocess.run([DRIVER, *words], input=stream, capture_output=True,
                                            check=True, timeout=600).stdout.split())
    model, theirs = BoxLeastSquares(at, flux, error), float('inf')
    for _ in range(ROUNDS):
        started = time.perf_counter()
        result = model.power(periods, durations, oversample=oversample)
        theirs = min(theirs, time.perf_counter() - started)
    print(f'{name:<52} astropy {theirs:7.3f} s   ours {ours:7.3f} s   {theirs / ours:5.1f} times as fast'
          f'   (sum of power {power / result.power.sum() - 1:+.4%})', flush=True)


def main():
    measure('27 d at 2 min, 3,000 periods, 4 durations', 27, 2 / 1440, np.geomspace(0.5, 13, 3000),
            [0.06, 0.1, 0.16, 0.25], 10)
    measure('27 d at 30 min, 3,000 periods, 4 durations', 27, 30 / 1440, np.geomspace(0.5, 13, 3000),
            [0.06, 0.1, 0.16, 0.25], 10)
    measure('1400 d at 30 min, 1,000 periods, 4 durations', 1400, 30 / 1440, np.geomspace(0.5, 300, 1000),
            [0.1, 0.16, 0.25, 0.4], 5)
    print('The sums differ by the boxes across the end of a folded period, which astropy cuts.')


if __name__ == '__main__':
    main()
