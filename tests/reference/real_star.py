#!/usr/bin/python3
"""The whole path on a real star: load, serve, rehearsal reviewers, consensus, export.

Source of the light curve: a public mission's archive. Source of the ephemeris: Bouma et al. 2019, quoted
from memory (T0 = 2455804.515752 BJD_TDB, P = 1.338231466 d); the covered transits, depth 2.4 to 2.8 % and
duration 1.9 to 2.4 h were found by an independent trapezoid fit. The second form needs no data from
outside: a star made here with transits at known times."""
import csv
import math
import pathlib
import random
import re
import signal
import subprocess
import sys
import tempfile

sys.path.insert(0, str(pathlib.Path(__file__).resolve().parent.parent))
from checks import PROGRAM, check, finish, shared_data, skip  # noqa: E402

T0, PERIOD = 2455804.515752, 1.338231466


def run(*arguments, **more):
    return subprocess.run([PROGRAM, *map(str, arguments)], check=True, capture_output=True, text=True, **more).stdout


class Server:
    def __init__(self, database, log):
        self.process = subprocess.Popen([PROGRAM, 'serve', '--database', database, '--listen', '127.0.0.1:0'],
                                        stdout=subprocess.PIPE, stderr=log, text=True)
        self.url = re.search(r'http://[0-9.]+:\d+', self.process.stdout.readline()).group()

    def __enter__(self):
        return self

    def __exit__(self, *_):
        self.process.send_signal(signal.SIGTERM)
        self.process.wait(timeout=60)


def candidates_of(place, path, seed):
    """Load one file, have rehearsal reviewers mark what is served, run, export."""
    database = str(place / 'campaign.db')
    run('load', '--database', database, '--batch', 'one', path)
    with open(place / 'server.log', 'w') as log, Server(database, log) as server:
        run('rehearse', '--server', server.url, '--reviewers', 24, '--seed', seed)
    run('consensus', '--database', database)
    table = place / 'candidates.csv'
    run('export', '--database', database, '--table', 'candidates', '--format', 'csv', '--output', table)
    with open(table, newline='') as file:
        return list(csv.DictReader(file))


def check_list(name, rows, mids, depth, duration, slack_d):
    likely = [r for r in rows if float(r['probability']) > 0.5]
    found = []
    for mid in mids:
        near = [r for r in likely if r['mid_time'] and abs(float(r['mid_time']) - mid) < slack_d]
        found += near[:1]
    check(f'{name}: each of the {len(mids)} transits is a candidate above 0.9, in its place',
          len(found) == len(mids) and all(float(r['probability']) > 0.9 for r in found),
          f'{len(found)} found')
    check(f'{name}: depths are in range', all(depth[0] <= float(r['depth_ppm']) <= depth[1] for r in found),
          sorted(float(r['depth_ppm']) for r in found))
    check(f'{name}: durations are in range', all(duration[0] <= float(r['duration_h']) <= duration[1] for r in found),
          sorted(float(r['duration_h']) for r in found))
    others = [r for r in likely if r not in found]
    check(f'{name}: nothing else is above 0.5', not others,
          [(r['mid_time'], r['probability'], r['snr']) for r in others])


def real(place):
    path = shared_data('light-curves/tic402026209-s02.fits')
    if path is None:
        skip('a real star, from file to ranked list', 'the open light curve is not here')
        return
    from astropy.io import fits
    with fits.open(path) as opened:
        table, head = opened[1].data, opened[1].header
        offset = head['BJDREFI'] + head['BJDREFF']
        good = (table['QUALITY'] == 0) & ~(table['PDCSAP_FLUX'] != table['PDCSAP_FLUX'])
        times = table['TIME'][good]
    first = math.ceil((times[0] + offset - T0) / PERIOD)
    mids = []
    for cycle in range(first, first + 40):
        mid = T0 + PERIOD * cycle - offset
        inside = times[abs(times - mid) < 0.045]
        if len(inside) > 0.9 * 0.09 * 720:
            mids.append(mid)
    check('the data cover 18 transits', len(mids) == 18, len(mids))
    check_list('the real star', candidates_of(place, path, 1), mids, (24000, 28000), (1.9, 2.4), 3 / 1440)


def made(place):
    """27 d at 10 minutes, noise of 600 ppm, a slow variation of 0.5 %, trapezoids of 1.5 % and 3 h."""
    noise = random.Random(20261)
    mids = [1.7 + 3.1 * k for k in range(8)]
    rows = []
    for i in range(27 * 144):
        t = i / 144
        flux = 1 + 0.005 * math.sin(t / 1.9) + noise.gauss(0, 6e-4)
        for mid in mids:
            edge = abs(t - mid) * 24
            flux -= 0.015 * min(max((1.5 - edge) / 0.3, 0), 1)
        rows.append(f'{t:.6f},{flux:.7f}')
    path = place / 'made.csv'
    path.write_text('time [BJD-2460000],flux\n' + '\n'.join(rows) + '\n')
    check_list('a made star', candidates_of(place, path, 2), mids, (13500, 16500), (2.4, 3.3), 10 / 1440)


def main():
    for form in (real, made):
        with tempfile.TemporaryDirectory(prefix='ebbmark-star-') as folder:
            form(pathlib.Path(folder))
    finish()


if __name__ == '__main__':
    main()
