#!/usr/bin/python3
"""Linking dips into series: least squares against numpy, intervals against simulation, surviving periods
against counting by hand, and a real hot Jupiter.

Source of the light curve: a public mission's archive. Source of its ephemeris: Bouma et al. 2019, quoted
from memory (T0 = 2455804.515752 BJD_TDB, P = 1.338231466 d)."""
import math
import os
import pathlib
import subprocess
import sys

import numpy as np

sys.path.insert(0, str(pathlib.Path(__file__).resolve().parent.parent))
from checks import ROOT, check, finish, shared_data, skip  # noqa: E402

BUILD = pathlib.Path(os.environ.get('EBBMARK_BUILD', ROOT / 'build/release'), 'tests/reference')
T0, PERIOD = 2455804.515752, 1.338231466
ALIAS = ('period', 'period_error', 'epoch', 'epoch_error', 'covariance', 'chi2', 'missing', 'evidence', 'share')


def run(driver, lines):
    done = subprocess.run([BUILD / driver], input='\n'.join(lines) + '\n', capture_output=True, text=True,
                          timeout=300)
    if done.returncode != 0:
        raise RuntimeError(done.stderr)
    return done.stdout.splitlines()


def watch(times, cadence):
    return [f'watch {len(times)} {cadence:.17g}', *('%.17g' % t for t in times)]


def events(rows):
    return [f'link {len(rows)}', *(' '.join('%.17g' % value for value in row) for row in rows)]


def linked(lines):
    """One list of series for each `link`."""
    answers = [[]]
    for kind, *words in (line.split() for line in run('series_driver', lines)):
        values = [float(word) for word in words]
        if kind == 'end':
            answers.append([])
        elif kind == 'series':
            answers[-1].append({'surviving': int(values[2]), 'members': [], 'cycles': [], 'aliases': [],
                                'ranges': []})
        elif kind == 'member':
            answers[-1][-1]['members'].append(int(values[0]))
            answers[-1][-1]['cycles'].append(int(values[1]))
        elif kind == 'alias':
            answers[-1][-1]['aliases'].append(dict(zip(ALIAS, values)))
        else:
            answers[-1][-1]['ranges'].append(tuple(values))
    return answers[:-1]


def cadences(*stretches, cadence=0.02):
    return np.concatenate([np.arange(a, b, cadence) for a, b in stretches])


def covered(times, mid, duration, cadence=0.02):
    return np.sum((times >= mid - duration / 2) & (times < mid + duration / 2)) * cadence >= duration / 2


def line_is_least_squares():
    random = np.random.default_rng(5)
    cycles = np.array([0, 1, 2, 5, 6, 9])
    error = np.array([1, 3, 0.7, 2, 5, 1]) * 1e-3
    mid = 1401.3 + 2.7183 * cycles + error * random.normal(size=cycles.size)
    best = linked(watch(cadences((1400, 1427)), 0.02) + events(
        [(m, e, 0.01, 3e-4, 0.12, 0.01, 0.9) for m, e in zip(mid, error)]))[0][0]
    got = best['aliases'][0]
    given = np.array(best['cycles'])
    (period, epoch), covariance = np.polyfit(given, mid - 1400, 1, w=1 / error, cov='unscaled')
    wanted = (period, math.sqrt(covariance[0, 0]), epoch + 1400, math.sqrt(covariance[1, 1]), covariance[0, 1],
              np.sum(((mid - 1400 - period * given - epoch) / error) ** 2))
    check('period, epoch, errors, covariance and chi2 are those of numpy.polyfit',
          np.allclose([got[name] for name in ALIAS[:6]], wanted, rtol=1e-7, atol=1e-12), (got, wanted))
    check('the epoch is the mid-time nearest the weighted middle',
          abs(covariance[0, 1]) < covariance[0, 0] * 0.5 + 1e-15, covariance)


def errors_cover():
    """500 stars in two stretches of 27 d, two years apart or not, one dip in twenty missed, and up to two
    candidates that belong to no series."""
    random = np.random.default_rng(20262)
    lines, truths = [], []
    for star in range(500):
        second = 27 if star % 2 else 700
        times = cadences((0, 12.5), (13.7, 26), (second, second + 12.5), (second + 13.7, second + 26)) + 1354
        period, duration = math.exp(random.uniform(math.log(0.9), math.log(9))), random.uniform(0.07, 0.2)
        first, depth = 1354 + period * random.random(), math.exp(random.uniform(math.log(1e-3), math.log(3e-2)))
        rows, kept = [], []
        for cycle in range(int((second + 27) / period) + 1):
            mid = first + cycle * period
            if covered(times, mid, duration) and random.random() > 0.05:
                error = duration * math.exp(random.uniform(math.log(0.01), math.log(0.1)))
                shallow = random.uniform(0.02, 0.1)
                rows.append((mid + error * random.normal(), error, depth * (1 + shallow * random.normal()),
                             depth * shallow, duration * math.exp(0.1 * random.normal()), 0.1 * duration, 0.95))
                kept.append(cycle)
        for _ in range(random.integers(3)):
            rows.append((random.choice(times), 0.01, depth * math.exp(random.uniform(-2, 2)), 0.1 * depth,
                         duration * math.exp(random.uniform(-1, 1)), 0.1 * duration, 0.4))
        if len(kept) < 3:
            continue
        lines += watch(times, 0.02) + events(rows)
        truths.append((period, first, kept))
    within, whole, right, foreign, number = [], 0, 0, 0, len(truths)
    for (period, first, kept), found in zip(truths, linked(lines)):
        best = found[0]
        whole += set(range(len(kept))) <= set(best['members'])
        foreign += any(member >= len(kept) for member in best['members'])
        if not best['aliases'] or abs(best['aliases'][0]['period'] / period - 1) > 0.01:
            continue
        right += 1
        alias = best['aliases'][0]
        off = (alias['epoch'] - first) / period
        within.append(((alias['period'] - period) / alias['period_error'],
                       (off - round(off)) * period / alias['epoch_error']))
    print(f'# {number} stars: period right {right}, all dips linked {whole}, a stranger linked {foreign}')
    check(f'in at least 97 of 100 of {number} simulated stars the period is right', right >= 0.97 * number, right)
    check('in at least 95 of 100 all dips are linked', whole >= 0.95 * number, whole)
    check('in at most 3 of 100 a candidate that belongs to nothing is linked', foreign <= 0.03 * number, foreign)
    for name, scores in zip(('period', 'epoch'), np.abs(np.array(within)).T):
        shares = [np.mean(scores < limit) for limit in (1, 1.96)]
        print(f'# {name}: 68 % intervals cover {shares[0]:.3f}, 95 % intervals {shares[1]:.3f}')
        check(f"the {name}'s 68 % interval covers in 60 to 76 of 100", 0.60 <= shares[0] <= 0.76, shares[0])
        check(f"the {name}'s 95 % interval covers in 92 to 98 of 100", 0.92 <= shares[1] <= 0.98, shares[1])


def aliases_survive_where_data_allow():
    times = cadences((0, 27), (700, 727))
    rows = [(11.0, 0.002, 0.01, 2e-4, 0.2, 0.01, 0.95), (716.3, 0.002, 0.0101, 2e-4, 0.2, 0.01, 0.95)]
    found = linked(['rule chance_missed 0.001', 'rule period_least_d 10'] + watch(times, 0.02) + events(rows))[0]
    allowed = []
    for cycles in range(1, 71):
        period = 705.3 / cycles
        mids = [11 + k * period for k in range(-3, cycles + 4) if k not in (0, cycles)]
        if not any(covered(times, mid, 0.2) for mid in mids):
            allowed.append(period)
    got = sorted((a['period'] for a in found[0]['aliases']), reverse=True)
    check('two dips two years apart are one series, and only they', len(found) == 1, found)
    # The list is of those with at least a hundredth of the likelihood; it goes with the number of cycles.
    check(f'its periods are the {len(allowed)} that put no dip on data',
          found[0]['surviving'] >= len(allowed) - 1 and np.allclose(got, allowed[-len(got):], rtol=1e-9)
          and len(got) == min(32, found[0]['surviving']), (len(allowed), found[0]['surviving'], got))
    check('the shares of all periods sum to 1 at most', 0.5 < sum(a['share'] for a in found[0]['aliases']) < 1 + 1e-9,
          [a['share'] for a in found[0]['aliases']])
    dense = linked(watch(cadences((0, 27)), 0.02) + events([(8.0, *rows[0][1:]), (18.0, *rows[0][1:])]))[0]
    check('two dips 10 d apart in 27 d without a gap leave one period',
          len(dense) == 1 and dense[0]['surviving'] == 1 and abs(dense[0]['aliases'][0]['period'] - 10) < 1e-9, dense)
    unlike = linked(watch(cadences((0, 27)), 0.02) + events([(8.0, 0.002, 0.01, 2e-4, 0.2, 0.01, 0.95),
                                                             (18.0, 0.002, 0.03, 2e-4, 0.2, 0.01, 0.95)]))[0]
    check('two dips of unlike depth stay single', [len(s['members']) for s in unlike] == [1, 1], unlike)


def single_has_the_range_that_data_allow():
    times = cadences((0, 12), (13.5, 25))
    found = linked(watch(times, 0.02) + events([(9.0, 0.002, 0.01, 2e-4, 0.2, 0.01, 0.95)]))[0][0]
    periods = np.exp(np.linspace(math.log(0.4), math.log(30), 20000))
    free = [not any(covered(times, 9 + k * p, 0.2) for k in range(-80, 81) if k) for p in periods]
    listed = [any(a <= p <= b for a, b in found['ranges']) for p in periods]
    edge = [any(abs(p - e) < 0.06 for r in found['ranges'] for e in r) for p in periods]
    wrong = [p for p, x, y, near in zip(periods, free, listed, edge) if x != y and not near]
    check('a single dip is reported as single', found['members'] == [0] and not found['aliases'], found)
    check('with the periods that put no dip on data', not wrong and 0 < sum(free) < len(free), (wrong[:9], found['ranges']))
    check('which have no end', math.isinf(found['ranges'][-1][1]) and 15 < found['ranges'][-1][0] < 16.2,
          found['ranges'])


def two_series_and_a_stranger():
    times = cadences((0, 27), (27.8, 54))
    mids = ([(1.1 + 3.31 * k, 0.01, 0.12) for k in range(17)], [(4.0 + 7.77 * k, 0.002, 0.25) for k in range(7)],
            [(33.3, 0.05, 0.5)])
    rows = [(m, 0.003, d, 0.05 * d, t, 0.1 * t, 0.9) for group in mids for m, d, t in group]
    order = np.random.default_rng(3).permutation(len(rows))
    found = linked(watch(times, 0.02) + events([rows[i] for i in order]))[0]
    groups = [sorted(int(order[i]) for i in s['members']) for s in found]
    check('two planets and a stranger come apart', groups == [list(range(17)), list(range(17, 24)), [24]], groups)


def hot_jupiter():
    path = shared_data('light-curves/tic402026209-s02.fits')
    if path is None:
        skip('the dips of a real hot Jupiter are linked', 'the open light curve is not here')
        return
    from astropy.io import fits
    with fits.open(path) as opened:
        table, head = opened[1].data, opened[1].header
        offset = head['BJDREFI'] + head['BJDREFF']
        good = (table['QUALITY'] == 0) & np.isfinite(table['PDCSAP_FLUX']) & np.isfinite(table['TIME'])
        times, flux = table['TIME'][good].astype(float), table['PDCSAP_FLUX'][good].astype(float)
    cadence = 2 / 1440
    flux /= np.median(flux)
    mids = [m for m in T0 - offset + PERIOD * np.arange(1900, 1950)
            if np.sum(np.abs(times - m) < 0.045) > 0.9 * 0.09 / cadence]
    # The boxes that a person might draw: up to 20 minutes off at either end.
    random = np.random.default_rng(8)
    lines = [f'data {len(times)}', *('%.17g %.17g' % row for row in zip(times, flux)), 'flatten 1.5 0.5',
             f'noise {cadence} 0.5']
    lines += [f'dip {m - 0.045 + random.uniform(-0.014, 0.014)} {m + 0.045 + random.uniform(-0.014, 0.014)} 0.5'
              for m in mids]
    dips = [[float(w) for w in line.split()] for line in run('measure_driver', lines)[1:]]
    rows = [(d[1], d[2], d[6], d[7], d[3], d[4], 0.99) for d in dips]
    found = linked(watch(times, cadence) + events(rows))[0]
    best = found[0]['aliases'][0]
    print(f"# hot Jupiter: P = {best['period']:.7f} +- {best['period_error']:.7f} d, chi2 {best['chi2']:.1f} of "
          f"{len(dips) - 2}, missing {best['missing']:.0f}, {found[0]['surviving']} period(s) survive")
    check('a real hot Jupiter: all 18 covered transits are linked', len(found) == 1 and len(found[0]['members']) == 18,
          [s['members'] for s in found])
    check('a real hot Jupiter: the period is within 1e-4 d of the published one', abs(best['period'] - PERIOD) < 1e-4,
          best['period'])
    check('a real hot Jupiter: no other period survives', found[0]['surviving'] == 1, found[0]['aliases'])
    epoch = (best['epoch'] + offset - T0) / PERIOD
    check('a real hot Jupiter: the epoch is within 2 minutes of the published ephemeris',
          abs(epoch - round(epoch)) * PERIOD < 2 / 1440, (epoch - round(epoch)) * PERIOD)


def main():
    line_is_least_squares()
    errors_cover()
    aliases_survive_where_data_allow()
    single_has_the_range_that_data_allow()
    two_series_and_a_stranger()
    hot_jupiter()
    finish()


if __name__ == '__main__':
    main()
