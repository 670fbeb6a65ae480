#!/usr/bin/python3
"""Every endpoint and every error of the HTTP interface, over a server of its own for each file here.

    tests/api/run.py [NAME…]        such as `reviews`; all of them without

Each file has check_all(server); one that starts servers of its own has check_all(template, folder). What must
wait for time to pass has begin(template, folder), called before all others, and check_all(begun), called last.
"""
import importlib
import inspect
import pathlib
import shutil
import sys
import tempfile
import traceback

sys.dont_write_bytecode = True
sys.path.insert(0, str(pathlib.Path(__file__).resolve().parent))
from support import DESCRIBED, FAULTS, Server, Template, check, finish  # noqa: E402

NOT_CHECKS = ('run', 'support', 'described')


def names():
    every = sorted(p.stem for p in pathlib.Path(__file__).parent.glob('*.py') if p.stem not in NOT_CHECKS)
    return [name for name in every if name in sys.argv[1:]] if len(sys.argv) > 1 else every


def run_one(name, template, folder, begun):
    module = importlib.import_module(name)
    if name in begun:
        module.check_all(begun[name])
        return
    if 'template' in inspect.signature(module.check_all).parameters:
        folder.mkdir()
        module.check_all(template, folder)
        return
    server = Server(template, folder)
    try:
        module.check_all(server)
    finally:
        alive = server.process.poll() is None
        status = server.stop() if alive else server.process.returncode
    check(f'{name}: the server lives to the end and stops cleanly', alive and status == 0,
          f'status {status}: {server.said()[-1500:]}')


def main():
    place = pathlib.Path(tempfile.mkdtemp(prefix='ebbmark-api-'))
    try:
        template = Template(place)
        begun = {name: importlib.import_module(name).begin(template, place / name)
                 for name in names() if hasattr(importlib.import_module(name), 'begin')}
        for name in sorted(names(), key=lambda name: name in begun):
            before = len(FAULTS)
            count = DESCRIBED.count
            try:
                run_one(name, template, place / name, begun)
            except Exception:
                check(f'{name}: ran to its end', False, traceback.format_exc())
            if DESCRIBED.count > count:
                check(f'{name}: every answer ({DESCRIBED.count - count}) is as openapi.json describes it',
                      len(FAULTS) == before, '\n'.join(FAULTS[before:][:10]))
        if len(sys.argv) == 1:
            check('every answer that openapi.json describes was seen, but those of overload and of faults',
                  DESCRIBED.unseen() == [], DESCRIBED.unseen())
    finally:
        shutil.rmtree(place, ignore_errors=True)
    finish()


if __name__ == '__main__':
    main()
