"""Told to stop while reviews come in: what was acknowledged is kept, and nothing hangs."""
import http.client
import sqlite3
import threading
import time

from support import Server, check

PEOPLE = 8


def send(guest, leases, answers):
    for number, lease in enumerate(leases):
        try:
            answer = guest.review(lease, key=f'stopping-{guest.person}-{number}')
        except (OSError, http.client.HTTPException):
            return
        answers.append(answer)


def check_all(template, folder):
    server = Server(template, folder)
    try:
        guests = [server.guest() for _ in range(PEOPLE)]
        leases = [[guest.take() for _ in range(12)] for guest in guests]
        answers = []
        threads = [threading.Thread(target=send, args=(guest, mine, answers)) for guest, mine in zip(guests, leases)]
        for thread in threads:
            thread.start()
        while len(answers) < 10:
            time.sleep(0.001)
        began = time.monotonic()
        status = server.stop()
        took = time.monotonic() - began
        for thread in threads:
            thread.join()
        check('a server that is told to stop in the middle of its work ends with status 0', status == 0, server.said()[-1500:])
        check('within its time of grace', took < 12, took)
        check('whoever was still told something was told 201 or 503', {a.status for a in answers} <= {201, 503},
              {a.status for a in answers})
        with sqlite3.connect(server.database) as connection:
            stored = {row[0] for row in connection.execute('SELECT id FROM review')}
        check('every review that was acknowledged is kept',
              {a.json['review'] for a in answers if a.status == 201} <= stored, len(stored))
    finally:
        server.stop()
