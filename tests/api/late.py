"""Leases that have ended: a minute must pass, so this begins first and is looked at last."""
import time

from support import Server, check


def begin(template, folder):
    server = Server(template, folder)
    server.admin.patch('/api/v1/campaign', {'lease_minutes': 1})
    guest = server.guest()
    leases = [guest.take() for _ in range(3)]
    return server, guest, leases, time.monotonic()


def check_all(begun):
    server, guest, leases, began = begun
    try:
        time.sleep(max(0.0, 61.0 - (time.monotonic() - began)))
        guest.close()
        answer = guest.review(leases[0], key='late-one')
        check('a review after its lease has ended is taken while the segment still needs looks, and says so',
              answer.status == 201 and answer.json['late'] is True, answer)
        again = guest.review(leases[0], key='late-one')
        check('sent again it gets the same answer', again.json == answer.json
              and again.headers.get('Ebbmark-Repeated') == '1', again)
        check('its holder still sees the segment', guest.get(leases[1]['segment']['flux']).status == 200)
        record = guest.get('/api/v1/me/record').json
        check('the record says that it was late', record['reviews'][0]['late'] is True, record['reviews'])
        batch = server.admin.get('/api/v1/batches').json['batches'][0]['batch']
        check('the batch is withdrawn', server.admin.post(f'/api/v1/batches/{batch}/withdrawal').status == 200)
        answer = guest.review(leases[1])
        check('once the segment needs no more looks a late review is refused: 409',
              answer.status == 409 and answer.kind == 'expired_lease', answer)
        again = guest.review(leases[0], key='late-one')
        check('but one that was taken before keeps its answer', again.status == 201 and again.json['late'] is True, again)
    finally:
        check('late: the server stops cleanly', server.stop() == 0, server.said()[-1500:])
