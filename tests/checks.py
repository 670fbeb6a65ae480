"""What the Python checks share: plain lines `ok - …`, `not ok - …`, `skip - … (why)`, one exit status."""
import os
import pathlib
import sys

ROOT = pathlib.Path(__file__).resolve().parent.parent
PROGRAM = os.environ.get('EBBMARK_PROGRAM', str(ROOT / 'build/release/ebbmark'))
_failed = 0


def check(sentence, holds, seen=''):
    """One check; `seen` tells what was there instead."""
    global _failed
    if holds:
        print(f'ok - {sentence}', flush=True)
    else:
        _failed += 1
        print(f'not ok - {sentence}' + (f' (seen: {seen})' if seen != '' else ''), flush=True)
    return bool(holds)


def skip(sentence, why):
    print(f'skip - {sentence} ({why})', flush=True)


def finish():
    sys.exit(1 if _failed else 0)


def shared_data(name):
    """A file of the open data that lies beside a checkout during development, or None."""
    folder = pathlib.Path(os.environ.get('EBBMARK_SHARED_DATA', ROOT.parent / 'shared/data'))
    path = folder / name
    return path if path.is_file() else None
