"""A full disk while reviews come in: none that was acknowledged is lost, and nothing crashes."""
import shutil
import sqlite3
import subprocess
import threading

from support import Server, check, is_root, skip

SENTENCES = ('a full disk while reviews come in is answered 507 or 503',
             'no review that was acknowledged is lost on a full disk')


def send_many(server, guest, acknowledged, refused):
    """Marks by the dozen, so that the disk fills; what became of each."""
    number = 0
    while number < 40 and len(refused) < 200:
        lease = guest.take()
        if lease is None:
            return
        starts = lease['segment']['starts'] + 1
        marks = [{'starts': starts + i * 0.01, 'ends': starts + i * 0.01 + 0.2, 'low': 0.9, 'high': 1.0} for i in range(50)]
        answer = guest.review(lease, marks, key=f'full-{guest.person}-{number}')
        (acknowledged if answer.status == 201 else refused).append(answer)
        number += 1


def fill(disk):
    """All but some kilobytes."""
    with open(disk / 'ballast', 'wb') as ballast:
        try:
            while True:
                ballast.write(b'\0' * 65536)
                ballast.flush()
        except OSError:
            pass


def check_all(template, folder):
    disk = folder / 'disk'
    disk.mkdir()
    if not is_root() or subprocess.run(['mount', '-t', 'tmpfs', '-o', 'size=24m', 'tmpfs', disk],
                                       capture_output=True).returncode != 0:
        for sentence in SENTENCES:
            skip(sentence, 'mounting a small disk needs root')
        return
    try:
        work(template, folder, disk)
    finally:
        subprocess.run(['umount', '-l', disk], check=True)


def work(template, folder, disk):
    shutil.copy(template.path, disk / 'campaign.db')
    server = DiskServer(template, folder, disk)
    try:
        guests = [server.guest() for _ in range(12)]
        fill(disk)
        acknowledged, refused = [], []
        threads = [threading.Thread(target=send_many, args=(server, guest, acknowledged, refused)) for guest in guests]
        for thread in threads:
            thread.start()
        for thread in threads:
            thread.join()
        check(SENTENCES[0], refused and {a.status for a in refused} <= {507, 503} and any(a.status == 507 for a in refused),
              (len(acknowledged), [repr(a) for a in refused[:3]]))
        check('the problem says that the disk is full', all('full' in a.json['detail'].lower() or a.status == 503
                                                            for a in refused), [repr(a) for a in refused[:3]])
        answer = server.client().get('/readyz')
        check('the server says that it is not ready', answer.status == 503 and answer.kind == 'not_ready', answer)
        check('but still up', server.client().get('/healthz').status == 200)
        (disk / 'ballast').unlink()
        guest = guests[0]
        lease = guest.take()
        answer = guest.review(lease) if lease else None
        check('with room made, reviews are taken again', answer is None or answer.status == 201, answer)
        check('and it is ready again', server.client().get('/readyz').status == 200)
        last = 1 if answer is not None else 0
        status = server.stop()
        check('the server has not crashed', status == 0, server.said()[-2000:])
        with sqlite3.connect(f'file:{disk}/campaign.db?mode=ro', uri=True) as connection:
            stored = {row[0] for row in connection.execute('SELECT id FROM review')}
            whole = connection.execute('SELECT count(*) FROM (SELECT review FROM mark GROUP BY review'
                                       ' HAVING count(*) = 50)').fetchone()[0]
            sound = connection.execute('PRAGMA integrity_check').fetchone()[0]
        ids = {a.json['review'] for a in acknowledged}
        check(SENTENCES[1], ids <= stored and len(stored) == len(ids) + last, (len(ids), len(stored)))
        check('each review is there whole or not at all', whole == len(ids), (whole, len(ids)))
        check('the database is sound', sound == 'ok', sound)
    finally:
        server.stop()


class DiskServer(Server):
    def __init__(self, template, folder, disk):
        self.disk = disk
        super().__init__(template, folder, copy=False)

    def start(self):
        self.database = self.disk / 'campaign.db'
        super().start()
