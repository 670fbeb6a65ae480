"""kill -9 while reviews come in: what was acknowledged is there, and sending the rest again stores it once."""
import http.client
import random
import sqlite3
import threading
import time

from support import Server, check

PEOPLE = 8


def send_until_it_breaks(guest, leases, sent, answered):
    for number, lease in enumerate(leases):
        starts = lease['segment']['starts'] + 1
        marks = [{'starts': starts + 0.3 * i, 'ends': starts + 0.3 * i + 0.2, 'low': 0.9, 'high': 1.0} for i in range(5)]
        key = f'killed-{guest.person}-{number}'
        sent.append((guest, lease, marks, key))
        try:
            answer = guest.review(lease, marks, key=key)
        except (OSError, http.client.HTTPException):
            return
        answered.append((key, answer.json['review']))


def check_all(template, folder):
    server = Server(template, folder)
    try:
        guests = [server.guest() for _ in range(PEOPLE)]
        leases = [[guest.take() for _ in range(12)] for guest in guests]
        sent, answered = [], []
        threads = [threading.Thread(target=send_until_it_breaks, args=(guest, mine, sent, answered))
                   for guest, mine in zip(guests, leases)]
        for thread in threads:
            thread.start()
        while len(answered) < 20:
            time.sleep(0.001)
        time.sleep(random.uniform(0, 0.01))
        server.kill()
        for thread in threads:
            thread.join()
        check('the server was killed in the middle', 20 <= len(answered) < PEOPLE * 12, len(answered))
        with sqlite3.connect(server.database) as connection:
            stored = dict(connection.execute('SELECT key, id FROM review'))
            sound = connection.execute('PRAGMA integrity_check').fetchone()[0]
        check('the database is sound after a kill', sound == 'ok', sound)
        check('every review that was acknowledged before the kill is there',
              all(stored.get(key) == review for key, review in answered), len(stored))
        server.start()
        for guest in guests:
            guest.port = server.port
            guest.close()
        known = dict(answered)
        again = [(key, guest.review(lease, marks, key=key)) for guest, lease, marks, key in sent]
        check('every review sent before the kill may be sent again', all(a.status == 201 for _, a in again),
              [repr(a) for _, a in again if a.status != 201][:3])
        check('those that were acknowledged get the same answer', all(
            a.json['review'] == known[key] and a.headers.get('Ebbmark-Repeated') == '1'
            for key, a in again if key in known))
        check('and whatever had been stored is known again', all(
            a.headers.get('Ebbmark-Repeated') == '1' for key, a in again if key in stored))
        check('the server stops cleanly after all that', server.stop() == 0, server.said()[-1500:])
        with sqlite3.connect(server.database) as connection:
            rows = connection.execute('SELECT count(*), count(DISTINCT key) FROM review').fetchone()
            marks = connection.execute('SELECT count(*) FROM mark').fetchone()[0]
        check('each of them is stored once', rows == (len(sent), len(sent)), (rows, len(sent)))
        check('with its marks once', marks == 5 * len(sent), marks)
    finally:
        server.stop()
