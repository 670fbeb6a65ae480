#!/usr/bin/python3
"""Tables written by us and read by others: CSV and JSON by Python's own readers, VOTable (IVOA VOTable
1.4) by astropy and by votlint of stilts."""
import csv
import io
import json
import math
import os
import pathlib
import shutil
import subprocess
import sys
import tempfile
import warnings

sys.path.insert(0, str(pathlib.Path(__file__).resolve().parent.parent))
from checks import ROOT, check, finish, skip  # noqa: E402

DRIVER = pathlib.Path(os.environ.get('EBBMARK_BUILD', ROOT / 'build/release')) / 'tests/reference/export_driver'
STARS = ['RB-0001', 'café, "q" <&>', '=SUM(A1)']
RA = [123.456789012345678, math.nan, 1 / 3]


def written(form):
    return subprocess.run([DRIVER, form], check=True, capture_output=True).stdout


def same(a, b):
    return (math.isnan(a) and math.isnan(b)) or a == b


def check_csv():
    rows = list(csv.DictReader(io.StringIO(written('csv').decode(), newline='')))
    check('CSV holds whole numbers past 2^53', rows[0]['candidate'] == '9007199254740993', rows[0])
    check('CSV reals read back as the same doubles', float(rows[0]['ra']) == RA[0] and rows[1]['ra'] == '', rows)
    check('CSV texts come back, a formula with an apostrophe before it',
          [r['star'] for r in rows] == STARS[:2] + ["'=SUM(A1)"], rows)


def check_json():
    table = json.loads(written('json'))
    check('JSON rows read back', [r['star'] for r in table['rows']] == STARS, table['rows'])
    check('JSON nulls stand for what is not known', table['rows'][1]['ra'] is None
          and table['rows'][2]['kept'] is None)
    check('JSON carries the facts', table['about'] == {'run': '3', 'caution': 'a < b & "c"'}, table['about'])


def check_votable():
    from astropy.io import votable
    text = written('votable')
    with warnings.catch_warnings(record=True) as warned:
        warnings.simplefilter('always')
        parsed = votable.parse(io.BytesIO(text), verify='warn')
    check('astropy reads the VOTable without a warning', not warned, [str(w.message) for w in warned])
    table = parsed.get_first_table()
    data = table.array
    check('VOTable texts come back', [str(s) for s in data['star']] == STARS, list(data['star']))
    check('VOTable whole numbers come back', int(data['candidate'][0]) == 9007199254740993)
    check('VOTable reals come back as the same doubles',
          all(same(float(a) if not m else math.nan, b) for a, m, b in zip(data['ra'], data['ra'].mask, RA)),
          list(data['ra']))
    check('VOTable units and UCDs come back', str(table.get_field_by_id_or_name('ra').unit) == 'deg'
          and table.get_field_by_id_or_name('ra').ucd == 'pos.eq.ra;meta.main')
    if shutil.which('stilts') is None:
        skip('votlint finds no error', 'stilts is not installed')
        return
    with tempfile.NamedTemporaryFile(suffix='.vot') as file:
        file.write(text)
        file.flush()
        lint = subprocess.run(['stilts', 'votlint', f'votable={file.name}', 'version=1.4'], capture_output=True,
                              text=True)
    said = (lint.stdout + lint.stderr).strip()
    check('votlint finds nothing to say', lint.returncode == 0 and 'ERROR' not in said and 'WARNING' not in said, said)


def main():
    check_csv()
    check_json()
    check_votable()
    finish()


if __name__ == '__main__':
    main()
