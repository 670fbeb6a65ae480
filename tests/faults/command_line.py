#!/usr/bin/python3
"""The command line in wrong hands: usage, missing things, unwritable places; and exports of what is there."""
import csv
import io
import json
import pathlib
import subprocess
import sys
import tempfile

sys.path.insert(0, str(pathlib.Path(__file__).resolve().parent.parent))
from checks import PROGRAM, ROOT, check, finish  # noqa: E402

COMMANDS = ['backup', 'serve', 'load', 'consensus', 'export', 'reviews', 'person', 'rehearse', 'invent', 'migrate', 'version']


def run(*arguments, text=None):
    return subprocess.run([PROGRAM, *map(str, arguments)], capture_output=True, text=True, input=text or '', timeout=300)


def one_sentence(result):
    """Failed with one plain sentence on standard error."""
    lines = result.stderr.strip().splitlines()
    return result.returncode == 1 and len(lines) == 1 and lines[0].startswith('ebbmark: ') and lines[0].endswith('.')


def usage():
    check('no command at all is wrong usage', run().returncode == 2)
    check('an unknown command is wrong usage and is named', run('fly').returncode == 2 and "'fly'" in run('fly').stderr)
    for command in COMMANDS:
        told = run(command, '--help')
        check(f'{command} --help tells its usage', told.returncode == 0 and f'ebbmark {command}' in told.stdout,
              told.stdout)
        wrong = run(command, '--no-such-option')
        check(f'{command} with an unknown option is wrong usage', wrong.returncode == 2, wrong.stderr)
    missing = run('load', '--batch', 'x', 'file')
    check('a missing option is named', missing.returncode == 2 and '--database' in missing.stderr, missing.stderr)
    odd = run('rehearse', '--server', 'http://127.0.0.1:9', '--reviewers', 'many')
    check('a number that is none is named', odd.returncode == 2 and 'many' in odd.stderr, odd.stderr)


def missing_things(place):
    nowhere = place / 'nowhere.db'
    for arguments in (('consensus', '--database', nowhere), ('migrate', '--database', nowhere),
                      ('export', '--database', nowhere, '--table', 'candidates', '--format', 'csv'),
                      ('reviews', '--database', nowhere, '--add', 'x.csv')):
        result = run(*arguments)
        check(f'{arguments[0]} on a database that is not there says so in one sentence', one_sentence(result),
              result.stderr)
    check('and none was made by that', not nowhere.exists())
    result = run('load', '--database', place / 'new.db', '--batch', 'x', place / 'no-such-folder')
    check('load of a path that is not there says so in one sentence', one_sentence(result), result.stderr)
    result = run('rehearse', '--server', 'http://127.0.0.1:9')
    check('rehearse without a server says so', result.returncode == 1 and 'does not answer' in result.stderr,
          result.stderr)
    result = run('load', '--database', '/proc/no.db', '--batch', 'x', place)
    check('a database where none can be made says so in one sentence', one_sentence(result), result.stderr)


def people(place):
    database = place / 'people.db'
    added = run('person', '--database', database, '--add', 'Keeper', '--role', 'admin', text='a long passphrase\n')
    check('a person is added', added.returncode == 0 and 'Keeper' in added.stdout, added.stderr)
    again = run('person', '--database', database, '--add', 'keeper', text='a long passphrase\n')
    check('a handle that reads alike is taken', one_sentence(again), again.stderr)
    short = run('person', '--database', database, '--add', 'other', text='short\n')
    check('a short passphrase is refused with the rule', one_sentence(short) and '10' in short.stderr, short.stderr)
    none = run('person', '--database', database, '--add', 'other', text='')
    check('no passphrase is refused', none.returncode == 1, none.stderr)
    token = run('person', '--database', database, '--token', 'KEEPER', '--days', 1)
    check('a token is told once, alone on its line', token.returncode == 0 and len(token.stdout.strip()) == 43,
          token.stdout)
    listed = run('person', '--database', database, '--list')
    check('people are listed without their passphrases', 'Keeper' in listed.stdout and 'argon2' not in listed.stdout)
    unknown = run('person', '--database', database, '--token', 'nobody')
    check('a token for nobody is refused', one_sentence(unknown), unknown.stderr)


def exports(place):
    database = place / 'demo.db'
    loaded = run('load', '--database', database, '--batch', 'Reedbed', '--stars', ROOT / 'demo-data/stars.csv',
                 ROOT / 'demo-data/light-curves')
    check('the demo survey loads', loaded.returncode == 0, loaded.stderr)
    early = run('export', '--database', database, '--table', 'candidates', '--format', 'csv')
    check('candidates before any run: one sentence that says so', one_sentence(early), early.stderr)
    marks = place / 'marks.csv'
    marks.write_text('review,reviewer,star,segment_starts,segment_ends,submitted,mark_starts,mark_ends,mark_low,'
                     'mark_high,certainty\n')
    check('reviews made elsewhere, none of them: nothing is added',
          '0 reviews added' in run('reviews', '--database', database, '--add', marks).stdout)
    done = run('consensus', '--database', database)
    check('a consensus over no reviews is a run with no candidates', done.returncode == 0 and '0 candidates' in
          done.stdout, done.stderr + done.stdout)
    for table in ('candidates', 'reviewers', 'reviews'):
        text = run('export', '--database', database, '--table', table, '--format', 'csv').stdout
        check(f'an empty table of {table} still has its head', len(next(csv.reader(io.StringIO(text)))) > 5, text)
    about = json.loads(run('export', '--database', database, '--table', 'candidates', '--format', 'json').stdout)
    check('the JSON says that a candidate is not a confirmed planet', 'not a confirmed planet' in str(about['about']))
    out = place / 'out.csv'
    run('export', '--database', database, '--table', 'reviews', '--format', 'csv', '--output', out)
    check('an export to a file leaves no half file beside it', out.exists() and list(place.glob('*.part')) == [])
    bad = run('export', '--database', database, '--table', 'reviews', '--format', 'csv', '--output', '/proc/x.csv')
    check('an export to where nothing can be written says so in one sentence', one_sentence(bad), bad.stderr)
    check('a table that is not there is wrong usage',
          run('export', '--database', database, '--table', 'tea', '--format', 'csv').returncode == 2)
    check('a run that is not there: one sentence', one_sentence(
        run('export', '--database', database, '--table', 'candidates', '--format', 'csv', '--run', 99)))


def backups(place):
    database, copy = place / 'demo.db', place / 'copy.db'
    made = run('backup', '--database', database, '--output', copy)
    check('a backup is made and said to be verified', made.returncode == 0 and 'verified' in made.stdout, made.stderr)
    again = run('backup', '--database', database, '--output', copy)
    check('a backup never overwrites', one_sentence(again), again.stderr)
    sound = run('backup', '--check', copy)
    check('a backup is checked', sound.returncode == 0 and 'sound' in sound.stdout, sound.stderr)
    other = place / 'other.db'
    put = run('backup', '--database', other, '--restore', copy)
    check('a backup is put back', put.returncode == 0, put.stderr)
    tables = [run('export', '--database', at, '--table', 'reviewers', '--format', 'json').stdout
              for at in (database, other)]
    check('a restored copy answers the same export', tables[0] == tables[1] != '', tables)
    put = run('backup', '--database', other, '--restore', copy)
    check('restoring over a database keeps the one that was there',
          put.returncode == 0 and len(list(place.glob('other.db.replaced-*'))) == 1, put.stderr)
    spoiled = place / 'spoiled.db'
    spoiled.write_bytes(copy.read_bytes()[:8192])
    bad = run('backup', '--check', spoiled)
    check('a damaged backup is told', one_sentence(bad), bad.stderr)
    check('backup without its options is wrong usage', run('backup').returncode == 2)


def main():
    usage()
    with tempfile.TemporaryDirectory(prefix='ebbmark-cli-') as folder:
        place = pathlib.Path(folder)
        missing_things(place)
        people(place)
        exports(place)
        backups(place)
    finish()


if __name__ == '__main__':
    main()
