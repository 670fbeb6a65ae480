#!/usr/bin/python3
"""Run every test and say, on the last line, how many passed, failed and were skipped.

    tests/run.py --release DIR --sanitize DIR [SUITE...]      suites: unit reference api faults browser

Every test program prints TAP lines (`ok`, `not ok`, `ok … # SKIP why`) or our plain form (`ok - x`,
`not ok - x`, `skip - x (why)`). A program that dies, hangs past its limit or prints no test at all
counts as one failure. The whole output of each program is kept under build/test-logs/.
"""
import argparse
import concurrent.futures
import os
import pathlib
import re
import shutil
import subprocess
import sys
import time

ROOT = pathlib.Path(__file__).resolve().parent.parent
LOGS = ROOT / 'build' / 'test-logs'
LIMIT_S = 420


def count(text):
    """(passed, failed, skipped, failed lines) of one program's output."""
    passed = failed = skipped = 0
    bad = []
    for line in text.splitlines():
        line = line.strip()
        # cmocka writes a skipped test as `not ok 1 # SKIP name`, node as `ok 1 - name # SKIP`.
        if re.match(r'skip - ', line) or re.match(r'(not )?ok\b.*# SKIP', line, re.I):
            skipped += 1
        elif re.match(r'not ok\b', line):
            failed += 1
            bad.append(line)
        elif re.match(r'ok\b', line):
            passed += 1
    return passed, failed, skipped, bad


def run(name, command, environment):
    """Run one program; its counts, with what went wrong."""
    started = time.monotonic()
    log = LOGS / (name.replace('/', '-') + '.log')
    if shutil.which(str(ROOT / command[0])) is None and shutil.which(command[0]) is None:
        print(f'FAIL  {name}: {command[0]} was not built', flush=True)
        return 0, 1, 0
    with open(log, 'wb') as out:
        process = subprocess.Popen(command, cwd=ROOT, stdout=out, stderr=subprocess.STDOUT,
                                   stdin=subprocess.DEVNULL, env={**os.environ, **environment},
                                   start_new_session=True)
        try:
            status = process.wait(timeout=LIMIT_S)
        except subprocess.TimeoutExpired:
            os.killpg(process.pid, 9)
            status = process.wait()
    passed, failed, skipped, bad = count(log.read_text(errors='replace'))
    if status != 0 and failed == 0:
        failed, bad = 1, [f'it ended with status {status} and no failed test']
    elif passed + failed + skipped == 0:
        failed, bad = 1, ['it ran no test']
    seconds = time.monotonic() - started
    print(f'{"FAIL" if failed else "pass"}  {name:<44} {passed:4} passed'
          + (f', {failed} failed' if failed else '') + (f', {skipped} skipped' if skipped else '')
          + f'  ({seconds:.1f} s)', flush=True)
    for line in bad:
        print(f'      {line}')
    if failed:
        tail = log.read_text(errors='replace').splitlines()[-25:]
        print('\n'.join('      | ' + line for line in tail), flush=True)
    return passed, failed, skipped


def programs(folder, pattern):
    return sorted(pathlib.Path(folder).glob(pattern))


def suites(release, sanitize):
    """Suite name -> list of (name, command, environment)."""
    tap = {'CMOCKA_MESSAGE_OUTPUT': 'TAP', 'CK_FORK': 'no'}
    unit = []
    for source in programs(ROOT / 'tests/unit', '*/*.c'):
        name = source.relative_to(ROOT).with_suffix('')
        unit.append((str(name.relative_to('tests')), [str(sanitize / name)], tap))
    python = '/usr/bin/python3'
    plain = {'EBBMARK_BUILD': str(release), 'EBBMARK_PROGRAM': str(release / 'ebbmark'),
             'OPENBLAS_NUM_THREADS': '1'}
    checked = {'EBBMARK_BUILD': str(sanitize), 'EBBMARK_PROGRAM': str(sanitize / 'ebbmark')}
    return {
        'unit': unit,
        'reference': [(f'reference/{p.stem}', [python, str(p)], plain)
                      for p in programs(ROOT / 'tests/reference', '*.py')],
        'api': [('api', [python, 'tests/api/run.py'], checked)],
        'faults': [(f'faults/{p.stem}', [python, str(p)], checked)
                   for p in programs(ROOT / 'tests/faults', '*.py')],
        'browser': [('browser', ['bash', 'tests/browser/run.sh'], plain)],
    }


def main():
    parser = argparse.ArgumentParser()
    parser.add_argument('--release', required=True, type=lambda p: pathlib.Path(p).resolve())
    parser.add_argument('--sanitize', required=True, type=lambda p: pathlib.Path(p).resolve())
    parser.add_argument('suite', nargs='*')
    arguments = parser.parse_args()
    LOGS.mkdir(parents=True, exist_ok=True)
    available = suites(arguments.release, arguments.sanitize)
    started = time.monotonic()
    totals = [0, 0, 0]
    for suite in arguments.suite or available:
        at_once = 2 if suite in ('unit', 'reference') else 1
        with concurrent.futures.ThreadPoolExecutor(at_once) as pool:
            for counts in pool.map(lambda job: run(*job), available[suite]):
                totals = [a + b for a, b in zip(totals, counts)]
    print(f'All tests took {time.monotonic() - started:.0f} s; their output is in build/test-logs/.')
    print(f'{totals[0]} passed, {totals[1]} failed, {totals[2]} skipped')
    return 1 if totals[1] else 0


if __name__ == '__main__':
    sys.exit(main())
