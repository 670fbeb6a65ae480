#!/usr/bin/python3
"""Box least squares against astropy.timeseries.BoxLeastSquares on the same grid, and against a plain
numpy form of the definition.

astropy lays the first bins of a folded period over its last one before it looks at boxes that reach the
end, so that such boxes miss that bin's light (seen with astropy 5.2.1). Ours close the ring. So power is
compared with astropy's wherever neither best box reaches the last bin, and everywhere with the numpy form,
which closes the ring too."""
import os
import pathlib
import subprocess
import sys

import numpy as np
from astropy.timeseries import BoxLeastSquares

sys.path.insert(0, str(pathlib.Path(__file__).resolve().parent.parent))
from checks import ROOT, check, finish  # noqa: E402

DRIVER = pathlib.Path(os.environ.get('EBBMARK_BUILD', ROOT / 'build/release'), 'tests/reference/bls_driver')


def ours(data, periods, durations, oversample, objective, threads=0):
    lines = [f'{objective} {oversample} {threads} {len(data[0])} {len(periods)} {len(durations)}']
    lines += ['%.17g %.17g %.17g' % row for row in zip(*data)]
    lines += ['%.17g' % value for value in (*periods, *durations)]
    done = subprocess.run([DRIVER], input='\n'.join(lines), capture_output=True, text=True, timeout=120,
                          check=True)
    return np.array([line.split() for line in done.stdout.splitlines()], float), done.stdout


def by_definition(data, period, durations, oversample, objective):
    """(power, last bin that the best box reaches, number of bins): mean outside less mean inside, for every
    start and duration, on the closed ring."""
    time, flux, error = data
    width = min(durations) / oversample
    bins = int(np.ceil(period / width))
    at = (np.fmod(time - time.min(), period) / width).astype(int)
    weight = 1 / error ** 2
    light = np.bincount(at, weight * (flux - np.median(flux)), bins)
    weights = np.bincount(at, weight, bins)
    best = (0.0, 0)
    for duration in durations:
        length = int(np.floor(duration / width + 0.5))
        ring = np.concatenate([light, light[:length]]), np.concatenate([weights, weights[:length]])
        inside, share = (np.convolve(part, np.ones(length), 'valid')[:bins] for part in ring)
        with np.errstate(all='ignore'):
            depth = (light.sum() - inside) / (weights.sum() - share) - inside / share
            merit = (0.5 * share * depth ** 2 if objective == 'likelihood'
                     else depth / np.sqrt(1 / share + 1 / (weights.sum() - share)))
        merit[~(depth > 0) | (share < weights.min() / 2 + 1e-6)] = 0
        if merit.max() > best[0]:
            best = (merit.max(), int(merit.argmax()) + length - 1)
    return (*best, bins)


def star(seed, days, count, even):
    """White noise with errors of two sizes, and dips of 1.5 sigma, 4 h long, every 3.457 d."""
    random = np.random.default_rng(seed)
    time = np.arange(count) * (days / count) if even else np.sort(random.uniform(0, days, count))
    time = time[(time < 0.4 * days) | (time > 0.55 * days)] + 1354.1
    error = np.where(random.random(time.size) < 0.5, 0.8e-3, 1.3e-3)
    flux = 1 + error * random.normal(size=time.size)
    flux[np.abs((time - 1355.3 + 1.7) % 3.457 - 1.7) < 0.0833] -= 1.5e-3
    return time, flux, error


def compare(name, data, periods, durations, oversample):
    for objective in ('likelihood', 'snr'):
        got, _ = ours(data, periods, durations, oversample, objective)
        theirs = BoxLeastSquares(*data).power(periods, durations, objective=objective, oversample=oversample)
        plain = [by_definition(data, p, durations, oversample, objective) for p in periods]
        power, last, bins = (np.array(part) for part in zip(*plain))
        worst = np.max(np.abs(got[:, 0] / power - 1))
        check(f'{name}, {objective}: power is that of the definition to 1e-9 at all {len(periods)} periods',
              worst < 1e-9, worst)
        width = min(durations) / oversample
        aligned = all(abs(d / width - round(d / width)) < 1e-9 for d in durations)
        middle = (theirs.transit_time - data[0].min()) % periods / width
        start = middle - theirs.duration / width / 2
        # A start between bins is one behind the last bin, taken back by a period.
        whole = np.abs(start - np.round(start)) < 1e-3 if aligned else np.full(len(periods), True)
        same = (last < bins - 1) & whole & (start > 0.5) & (middle + theirs.duration / width / 2 < bins - 0.5)
        check(f'{name}, {objective}: at least four in five best boxes stay off the end of the folded period',
              same.mean() > 0.8, same.mean())
        for label, at, column in (('power', 0, theirs.power), ('depth', 1, theirs.depth),
                                  ('error of the depth', 2, theirs.depth_err), ('SNR', 3, theirs.depth_snr),
                                  ('log-likelihood', 4, theirs.log_likelihood)):
            difference = np.abs(got[same, at] / column[same] - 1)
            check(f"{name}, {objective}: {label} is astropy's to 1e-6", difference.max() < 1e-6,
                  (difference.max(), periods[same][difference.argmax()]))
        # Two boxes over the same points tie, and a rounding decides.
        agree = np.abs(got[:, 6] - theirs.transit_time)[same] < min(durations) / 2
        check(f"{name}, {objective}: mid-times are astropy's, but for ties", agree.mean() > 0.97, agree.mean())
        check(f"{name}, {objective}: the peak is at astropy's period",
              periods[got[:, 0].argmax()] == periods[np.argmax(theirs.power)],
              (periods[got[:, 0].argmax()], periods[np.argmax(theirs.power)]))


def main():
    grid = np.linspace(0.7, 11.3, 1500)
    compare('points at random times', star(1, 40, 2500, False), grid, [0.08, 0.167, 0.301], 7)
    compare('an even cadence', star(2, 27, 27 * 48, True), np.geomspace(0.6, 9, 1200), [0.1, 0.2], 10)
    compare('one duration, coarse', star(3, 90, 1500, False), grid, [0.15], 3)

    # Round numbers put points on the very edges of bins, where a rounding would move them.
    time = np.arange(0, 32, 1 / 64)
    edge = (time, 1 + 1e-3 * np.sin(time * 37.1) - 2e-3 * (time % 4 < 0.25), np.full(time.size, 1e-3))
    compare('points on the edges of bins', edge, np.arange(1, 9, 1 / 128), [0.125, 0.25], 8)

    data = star(4, 40, 2500, False)
    alone = ours(data, grid, [0.1, 0.2], 10, 'likelihood')[1]
    check('one, two and five threads give the same bits',
          all(ours(data, grid, [0.1, 0.2], 10, 'likelihood', n)[1] == alone for n in (1, 2, 5)))
    boxes = []
    for shift in np.linspace(0, 3, 25):
        time = np.arange(0, 30, 0.00317)
        flux = 1 - 1e-2 * (np.abs((time - shift + 1.5) % 3 - 1.5) < 0.08)
        box = ours((time, flux, np.full(time.size, 1e-3)), [3.0], [0.16], 16, 'likelihood')[0][0]
        boxes.append((box[0], box[1], abs((box[6] - shift + 1.5) % 3 - 1.5)))
    power, depth, off = np.array(boxes).T
    check('a dip at any phase of a period, also across its end, is found whole', power.min() > 0.9 * power.max()
          and np.abs(depth / 1e-2 - 1).max() < 0.05 and off.max() < 0.01, (power.min(), power.max(), depth, off))
    finish()


if __name__ == '__main__':
    main()
