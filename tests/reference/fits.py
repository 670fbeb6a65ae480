#!/usr/bin/python3
"""FITS and CSV files written by astropy and numpy, read by lightcurve_read_bytes, compared.

Values must agree with what astropy reads from the same file, to the last bit where no arithmetic is
involved. The published light curve is read where the open data folder holds it.
"""
import gzip
import json
import os
import pathlib
import subprocess
import sys
import tempfile

import numpy as np
from astropy.io import fits
from astropy.table import Table

sys.path.insert(0, str(pathlib.Path(__file__).resolve().parent.parent))
from checks import ROOT, check, finish, shared_data, skip  # noqa: E402

DRIVER = pathlib.Path(os.environ.get('EBBMARK_BUILD', ROOT / 'build/release'),
                      'tests/reference/read_driver')
HOLDER = tempfile.TemporaryDirectory(prefix='ebbmark-fits-')
FOLDER = HOLDER.name


def agrees(sentence, wrong):
    """A check that holds when `wrong`, the first difference found, is empty."""
    check(sentence, not wrong, wrong)


def read(path, *mapping):
    """What our reader finds in a file, as a dict."""
    done = subprocess.run([DRIVER, str(path), *mapping], capture_output=True, timeout=60, check=True)
    return json.loads(done.stdout)


def numbers(values):
    return np.array([float(value) for value in values])


def differs(ours, theirs, relative=0.0):
    """The first difference between two arrays as text, or an empty one."""
    theirs = np.asarray(theirs, dtype=float)
    ours = numbers(ours)
    if ours.shape != theirs.shape:
        return f'{ours.shape} values, astropy has {theirs.shape}'
    same = (ours == theirs) | (np.isnan(ours) & np.isnan(theirs))
    if relative > 0.0:
        with np.errstate(invalid='ignore'):
            same |= np.abs(ours - theirs) <= relative * np.abs(theirs)
    if same.all():
        return ''
    row = int(np.argmin(same))
    return f'row {row} is {ours[row]!r}, astropy has {theirs[row]!r}'


def path_of(name):
    return os.path.join(FOLDER, name)


def write_table(name, columns, cards=(), primary_cards=()):
    table = fits.BinTableHDU.from_columns(columns)
    for key, value in cards:
        table.header[key] = value
    primary = fits.PrimaryHDU()
    for key, value in primary_cards:
        primary.header[key] = value
    fits.HDUList([primary, table]).writeto(path_of(name), overwrite=True)
    return path_of(name)


def astropy_column(path, name, hdu=1):
    """A column as astropy reads it, missing integers as NaN."""
    column = Table.read(path, hdu=hdu)[name]
    values = np.asarray(column, dtype=float)
    if hasattr(column, 'mask'):
        values = np.where(np.ma.getmaskarray(column), np.nan, values)
    return values


def insert_cards(path, after, *cards):
    """Put cards before the END of the header that holds `after`, as astropy would not write them."""
    with open(path, 'rb') as file:
        raw = bytearray(file.read())
    end = raw.index(b'END' + b' ' * 77, raw.index(after))
    text = "".join(card.ljust(80) for card in (*cards, 'END')).encode()
    raw[end:end + len(text)] = text
    with open(path, 'wb') as file:
        file.write(raw)


def every_type():
    generator = np.random.default_rng(20260)
    rows = 997
    time = np.sort(generator.uniform(0.0, 27.0, rows))
    limits = {'B': (0, 255), 'I': (-32768, 32767), 'J': (-(2**31), 2**31 - 1),
              'K': (-(2**52), 2**52)}
    for form, numpy_type in (('B', 'u1'), ('I', 'i2'), ('J', 'i4'), ('K', 'i8'), ('E', 'f4'),
                             ('D', 'f8')):
        if form in limits:
            flux = generator.integers(*limits[form], rows, endpoint=True).astype(numpy_type)
        else:
            flux = generator.normal(1e4, 10.0, rows).astype(numpy_type)
            flux[::13] = np.nan
            flux[5] = np.inf
            flux[6] = np.finfo(numpy_type).tiny / 8
        columns = [fits.Column('TIME', 'D', array=time),
                   fits.Column('FLUX', form, array=flux),
                   fits.Column('FLUX_ERR', form, array=flux)]
        path = write_table(f'plain-{form}.fits', columns)
        curve = read(path)['curves'][0]
        wrong = (differs(curve['time'], time) or differs(curve['flux'], flux)
                 or differs(curve['error'], flux))
        agrees(f'a column of type {form} is read to the last bit', wrong)


def scaled_and_missing():
    generator = np.random.default_rng(7)
    rows = 500
    time = np.arange(rows) / 48.0
    for form, numpy_type in (('B', 'u1'), ('I', 'i2'), ('J', 'i4'), ('K', 'i8')):
        stored = generator.integers(0, 200, rows).astype(numpy_type)
        stored[::7] = 99
        hdu = fits.BinTableHDU.from_columns([fits.Column('TIME', 'D', array=time),
                                             fits.Column('FLUX', form, array=stored)])
        path = path_of(f'scaled-{form}.fits')
        fits.HDUList([fits.PrimaryHDU(), hdu]).writeto(path, overwrite=True)
        # The keywords are set in the stored file: astropy would otherwise scale the values itself.
        with fits.open(path, mode='update', do_not_scale_image_data=True) as file:
            file[1].header['TNULL2'] = 99
        wrong = differs(read(path)['curves'][0]['flux'], astropy_column(path, 'FLUX'))
        agrees(f'missing values of type {form} are where astropy masks them', wrong)
        insert_cards(path, b'TNULL2  =', f"{'TSCAL2  =':<10}{0.125:>20}",
                     f"{'TZERO2  =':<10}{1000.0:>20}")
        # FITS 4.0, section 7.3.2: TNULL is the stored value, before scaling. astropy looks for it
        # after scaling, so it is no judge here.
        expected = np.where(stored == 99, np.nan, stored * 0.125 + 1000.0)
        wrong = differs(read(path)['curves'][0]['flux'], expected)
        agrees(f'scaled and missing values of type {form} follow the standard', wrong)
        if form == 'K':
            continue  # astropy 5.2 fails on scaled 64-bit integers
        path = path_of(f'only-scaled-{form}.fits')
        fits.HDUList([fits.PrimaryHDU(), hdu]).writeto(path, overwrite=True)
        insert_cards(path, b'TFORM2  =', f"{'TSCAL2  =':<10}{0.375:>20}",
                     f"{'TZERO2  =':<10}{-3.5:>20}")
        wrong = differs(read(path)['curves'][0]['flux'], astropy_column(path, 'FLUX'))
        agrees(f'scaled values of type {form} are read as by astropy', wrong)


def unsigned():
    rows = 300
    time = np.arange(rows, dtype=float)
    for form, numpy_type, zero in (('I', np.uint16, 2**15), ('J', np.uint32, 2**31),
                                   ('K', np.uint64, 2**63)):
        flux = np.linspace(0, np.iinfo(numpy_type).max // 2, rows).astype(numpy_type)
        quality = np.zeros(rows, dtype=numpy_type)
        quality[3] = 4
        path = write_table(f'unsigned-{form}.fits',
                           [fits.Column('TIME', 'D', array=time),
                            fits.Column('FLUX', form, bzero=zero, array=flux),
                            fits.Column('QUALITY', form, bzero=zero, array=quality)])
        curve = read(path)['curves'][0]
        wrong = differs(curve['flux'], flux, 1e-15) or differs(curve['quality'], quality)
        agrees(f'an unsigned column of type {form} is read', wrong)


def several_tables():
    time = np.arange(200) / 10.0
    first = fits.BinTableHDU.from_columns([fits.Column('START', 'D', array=time),
                                           fits.Column('FLUX', 'D', array=time)])
    image = fits.ImageHDU(np.zeros((31, 17), dtype='f4'))
    second = fits.BinTableHDU.from_columns(
        [fits.Column('TIME', 'D', array=time, unit='d'),
         fits.Column('PIXEL_RAW_FLUX', '4E', array=np.zeros((200, 4))),
         fits.Column('RAW_FLUX', 'E', array=time + 5),
         fits.Column('NOTE', 'PE()', array=np.array([np.zeros(i % 5) for i in range(200)],
                                                    dtype=object)),
         fits.Column('NAME', '10A', array=['RB'] * 200)])
    third = fits.BinTableHDU.from_columns([fits.Column('TIME', 'D', array=time),
                                           fits.Column('LONGEST_FLUX', 'D', array=time)])
    path = path_of('several.fits')
    primary = fits.PrimaryHDU(np.zeros((8, 8), dtype='i2'))
    primary.header['OBJECT'] = 'RB-0100'
    fits.HDUList([primary, first, image, second, third]).writeto(path)
    curve = read(path)['curves'][0]
    wrong = differs(curve['flux'], (time + 5).astype('f4'))
    agrees('the first table with a time and a usable flux column is taken', wrong)
    check('the name of the star is read from the primary header', curve['star'] == 'RB-0100',
          curve['star'])
    packed = path_of('several.fits.gz')
    with open(path, 'rb') as source, gzip.open(packed, 'wb') as target:
        target.write(source.read())
    check('a gzip-compressed file gives the same', read(packed) == read(path))
    with open(path, 'rb') as source:
        whole = source.read()
    with fits.open(path) as file:
        info = file[3].fileinfo()
    needed = info['datLoc'] + info['datSpan'] - 2880
    wrong = ''
    for length in range(2880, needed, 1111):
        with open(path_of('cut.fits'), 'wb') as target:
            target.write(whole[:length])
        said = read(path_of('cut.fits'))
        if 'curves' in said:
            wrong = f'{length} bytes were read'
        elif said['kind'] != 'invalid':
            wrong = said['error']
    agrees('a file cut short ends in a stated error', wrong)


def references():
    time = np.arange(120, dtype=float)

    def columns(unit=None):
        return [fits.Column('TIME', 'D', array=time, unit=unit),
                fits.Column('FLUX', 'D', array=time + 1)]

    cases = [
        ('BJDREFI and BJDREFF', columns('d'),
         [('BJDREFI', 2460000), ('BJDREFF', 0.0), ('TIMESYS', 'TDB'), ('TIMEUNIT', 'd')],
         'BJD_TDB - 2460000', 1.0),
        ('TUNIT text', columns('BJD - 2460000, days'), [('TIMESYS', 'TDB')], 'BJD_TDB - 2460000',
         1.0),
        ('MJDREF in seconds', columns('s'),
         [('MJDREFI', 51544), ('MJDREFF', 0.00074287037037037), ('TIMESYS', 'TT')],
         'MJD_TT - 51544.00074287037', 86400.0),
        ('TIMEUNIT alone', columns(), [('TIMEUNIT', 's'), ('MJDREF', 58000.0), ('TIMESYS', 'UTC')],
         'MJD_UTC - 58000', 86400.0),
    ]
    for name, table, cards, reference, per_day in cases:
        path = write_table('reference.fits', table, cards)
        curve = read(path)['curves'][0]
        wrong = differs(curve['time'], time / per_day, 1e-15)
        if curve['reference'] != reference:
            wrong = curve['reference']
        agrees(f'the time reference is read from {name}', wrong)


def csv_files():
    generator = np.random.default_rng(3)
    table = Table({'time [BJD_TDB - 2460000]': np.sort(generator.uniform(0, 30, 400)),
                   'flux': generator.normal(1.0, 1e-3, 400),
                   'flux_err': np.full(400, 1e-3),
                   'quality': generator.integers(0, 3, 400)})
    for name, form in (('plain.csv', 'ascii.csv'), ('tab.txt', 'ascii.tab'),
                       ('ecsv.csv', 'ascii.ecsv')):
        options = {'delimiter': ','} if form == 'ascii.ecsv' else {}
        table.write(path_of(name), format=form, overwrite=True, **options)
        said = read(path_of(name))
        if 'error' in said:
            agrees(f'{form} as astropy writes it is read', said['error'])
            continue
        curve = said['curves'][0]
        wrong = (differs(curve['time'], table.columns[0]) or differs(curve['flux'], table['flux'])
                 or differs(curve['error'], table['flux_err'])
                 or differs(curve['quality'], table['quality']))
        if curve['reference'] != 'BJD_TDB - 2460000':
            wrong = curve['reference']
        agrees(f'{form} as astropy writes it is read to the last bit', wrong)
    np.savetxt(path_of('numpy.csv'), np.column_stack([table.columns[0], table['flux']]),
               delimiter=',', header='time [d],flux')
    curve = read(path_of('numpy.csv'))['curves'][0]
    wrong = differs(curve['flux'], table['flux'])
    agrees('a CSV as numpy.savetxt writes it, its header behind a #, is read', wrong)


def published_light_curve():
    """Two-minute light curve from a public survey mission's archive (public domain)."""
    path = shared_data('light-curves/tic402026209-s02.fits')
    sentence = 'a published light curve is read as by astropy'
    if path is None:
        skip(sentence, 'the open data folder is not there')
        return
    with fits.open(path) as file:
        data, header = file[1].data, file[1].header
        star, ra, dec = header['OBJECT'], header['RA_OBJ'], header['DEC_OBJ']
        teff, radius = file[0].header['TEFF'], file[0].header['RADIUS']
        magnitude = file[0].header['TESSMAG']
        curve = read(path, 'key_magnitude=TESSMAG')['curves'][0]
        wrong = (differs(curve['time'], data['TIME'])
                 or differs(curve['flux'], data['PDCSAP_FLUX'])
                 or differs(curve['error'], data['PDCSAP_FLUX_ERR'])
                 or differs(curve['quality'], data['QUALITY'])
                 or differs(curve['facts'], [ra, dec, magnitude, teff, radius]))
        if len(curve['time']) != 19737:
            wrong = f"{len(curve['time'])} rows"
        if (curve['star'], curve['reference']) != (star, 'BJD_TDB - 2457000'):
            wrong = f"{curve['star']}, {curve['reference']}"
        agrees(sentence, wrong)
        other = read(path, 'flux=SAP_FLUX', 'error=-')['curves'][0]
        wrong = differs(other['flux'], data['SAP_FLUX'])
        agrees('another flux column can be named', wrong)
        check('errors can be left out', other['error'] is None)


every_type()
scaled_and_missing()
unsigned()
several_tables()
references()
csv_files()
published_light_curve()
finish()
