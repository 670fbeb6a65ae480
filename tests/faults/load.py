#!/usr/bin/python3
"""Loading when the world fails: a kill in the middle, a full disk, a second process, bad files."""
import os
import pathlib
import random
import signal
import sqlite3
import subprocess
import sys
import tempfile
import time

sys.path.insert(0, str(pathlib.Path(__file__).resolve().parent.parent))
from checks import PROGRAM, check, finish, skip  # noqa: E402

POINTS = 1500
STARS = 400


def write_star(folder, number):
    noise = random.Random(number)
    rows = '\n'.join(f'{0.02 * i:.4f},{1000 + noise.gauss(0, 1):.3f}' for i in range(POINTS))
    (folder / f'star-{number:04}.csv').write_text('time [BJD-2460000],flux\n' + rows + '\n')


def write_stars(folder, count):
    folder.mkdir()
    for number in range(count):
        write_star(folder, number)


def load(database, *paths, batch='first'):
    return subprocess.run([PROGRAM, 'load', '--database', database, '--batch', batch, *map(str, paths)],
                          capture_output=True, text=True, stdin=subprocess.DEVNULL)


def rows(database, question):
    with sqlite3.connect(f'file:{database}?mode=ro', uri=True) as connection:
        return connection.execute(question).fetchone()[0]


def whole(database, stars):
    """Every star once, with a light curve, a sound database."""
    return (rows(database, 'SELECT count(*) FROM star') == stars
            and rows(database, 'SELECT count(*) FROM light_curve') == stars
            and rows(database, 'PRAGMA integrity_check') == 'ok')


def killed_in_the_middle(place):
    stars = place / 'many'
    write_stars(stars, STARS)
    database = str(place / 'killed.db')
    kills, status = 0, None
    while kills < 6 and status is None:
        process = subprocess.Popen([PROGRAM, 'load', '--database', database, '--batch', 'first', str(stars)],
                                   stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
        time.sleep(random.uniform(0.02, 0.25))
        if process.poll() is None:
            process.send_signal(signal.SIGKILL)
            kills += 1
            process.wait()
        else:
            status = process.returncode
    if status is None:
        status = load(database, stars).returncode
    check('a load was killed at least once before it was done', kills >= 1, kills)
    check('the same command goes on with a killed load and finishes it', status == 0, status)
    check('after kills and a resume every star is there exactly once', whole(database, STARS))


def full_disk(place):
    if os.geteuid() != 0:
        skip('a full disk during a load loses nothing', 'mounting a small disk needs root')
        return
    disk = place / 'disk'
    disk.mkdir()
    if subprocess.run(['mount', '-t', 'tmpfs', '-o', 'size=3m', 'tmpfs', disk]).returncode != 0:
        skip('a full disk during a load loses nothing', 'a tmpfs could not be mounted here')
        return
    try:
        database = str(disk / 'campaign.db')
        stars = place / 'many'
        first = load(database, stars)
        check('a load onto a full disk fails with one sentence that says so',
              first.returncode == 1 and 'full' in first.stderr.lower() and first.stderr.count('\n') <= 2,
              f'{first.returncode} {first.stderr}')
        subprocess.run(['mount', '-o', 'remount,size=200m', disk], check=True)
        second = load(database, stars)
        check('with room made, the same command finishes the load', second.returncode == 0, second.stderr)
        check('after a full disk every star is there exactly once', whole(database, STARS))
    finally:
        subprocess.run(['umount', '-l', disk], check=True)


def bad_among_good(place):
    folder = place / 'mixed'
    write_stars(folder, 3)
    (folder / 'no-header.csv').write_text('\n'.join(f'{i},1.0' for i in range(500)))
    (folder / 'words.csv').write_text('time,flux\n' + '\n'.join(f'{i},bright' for i in range(500)))
    (folder / 'wide.csv').write_text(','.join(f'c{i}' for i in range(1_000_000)) + '\n')
    (folder / 'short.csv').write_text('time,flux\n' + '\n'.join(f'{i},1.0' for i in range(20)))
    (folder / 'header.fits').write_bytes(b'SIMPLE  =                    T' + b' ' * 500)
    (folder / 'empty.fits').write_bytes(b'')
    result = load(str(place / 'mixed.db'), folder)
    check('bad files among good ones: exit status 3', result.returncode == 3, result.returncode)
    for name in ('no-header.csv', 'words.csv', 'wide.csv', 'short.csv', 'header.fits', 'empty.fits'):
        said = [line for line in result.stderr.splitlines() if name in line]
        check(f'{name} is refused with its reason', len(said) == 1 and len(said[0]) > len(name) + 25, said)
    check('the good files are loaded all the same', rows(str(place / 'mixed.db'), 'SELECT count(*) FROM star') == 3)
    again = load(str(place / 'mixed.db'), folder, batch='second')
    check('loading the same bytes again adds nothing',
          rows(str(place / 'mixed.db'), 'SELECT count(*) FROM light_curve') == 3 and '3 loaded before' in again.stdout,
          again.stdout)


def second_process(place):
    database = str(place / 'mixed.db')
    server = subprocess.Popen([PROGRAM, 'serve', '--database', database, '--listen', '127.0.0.1:0'],
                              stdout=subprocess.PIPE, stderr=subprocess.DEVNULL, text=True)
    try:
        server.stdout.readline()
        result = load(database, place / 'mixed', batch='third')
        check('a second process on one database says so and stops',
              result.returncode == 1 and str(server.pid) in result.stderr, result.stderr)
    finally:
        server.send_signal(signal.SIGTERM)
        server.wait(timeout=30)
    check('a server that is told to stop ends with status 0', server.returncode == 0, server.returncode)


def spoiled_databases(place):
    newer = place / 'newer.db'
    load(str(newer), place / 'mixed' / 'star-0000.csv')
    with sqlite3.connect(newer) as connection:
        connection.execute('PRAGMA user_version = 9999')
    result = load(str(newer), place / 'mixed')
    check('a database newer than the program is refused', result.returncode == 1 and 'newer' in result.stderr,
          result.stderr)
    text = place / 'text.db'
    text.write_text('this is no database\n' * 100)
    result = load(str(text), place / 'mixed')
    check('a file that is no database is refused and left alone',
          result.returncode == 1 and text.read_text().startswith('this is no database'), result.stderr)
    cut = place / 'cut.db'
    load(str(cut), place / 'mixed')
    size = cut.stat().st_size
    with open(cut, 'r+b') as file:
        file.truncate(size // 2)
    result = subprocess.run([PROGRAM, 'consensus', '--database', str(cut)], capture_output=True, text=True)
    check('a truncated database ends in a sentence, not a crash',
          result.returncode in (0, 1) and (result.returncode == 0 or result.stderr.startswith('ebbmark: ')),
          f'{result.returncode} {result.stderr}')


def main():
    with tempfile.TemporaryDirectory(prefix='ebbmark-faults-') as folder:
        place = pathlib.Path(folder)
        killed_in_the_middle(place)
        full_disk(place)
        bad_among_good(place)
        second_process(place)
        spoiled_databases(place)
    finish()


if __name__ == '__main__':
    main()
