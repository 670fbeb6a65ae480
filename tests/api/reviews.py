"""/reviews: what is taken, what is refused, and that nothing is stored twice."""
import json
import sqlite3

from support import check


def stored(server, question='SELECT count(*) FROM review'):
    with sqlite3.connect(f'file:{server.database}?mode=ro', uri=True) as connection:
        return connection.execute(question).fetchall()


def mark_in(lease, **changes):
    starts = lease['segment']['starts'] + 1
    return {'starts': starts, 'ends': starts + 0.25, 'low': 0.98, 'high': 1.01, **changes}


def taking(server):
    guest = server.guest()
    lease = guest.take()
    marks = [mark_in(lease), mark_in(lease, certainty='unsure')]
    answer = guest.review(lease, marks, conditions=['break', 'keeps_changing'], seconds=12.5)
    check('a review is taken', answer.status == 201 and answer.json['late'] is False
          and answer.headers.get('Ebbmark-Repeated') is None, answer)
    check('and is in the database when it is acknowledged, as it was sent',
          stored(server, f'SELECT seconds, conditions, late FROM review WHERE id = {answer.json["review"]}')
          == [(12.5, 3, 0)])
    rows = stored(server, 'SELECT starts, ends, low, high, sure FROM mark ORDER BY id')
    check('with its marks', [row[4] for row in rows] == [1, 0] and abs(rows[0][0] - marks[0]['starts']) < 1e-9, rows)
    answer = guest.review(guest.take())
    check('a look without marks is a review too', answer.status == 201, answer)
    lease = guest.take()
    starts, ends = lease['segment']['starts'], lease['segment']['ends']
    answer = guest.review(lease, [mark_in(lease, starts=starts - 0.009, ends=ends + 0.009)])
    check('a mark that reaches over the edge by a hair is taken', answer.status == 201, answer)
    row = stored(server, 'SELECT starts, ends FROM mark ORDER BY id DESC LIMIT 1')[0]
    check('and cut to the segment', abs(row[0] - starts) < 1e-9 and abs(row[1] - ends) < 1e-9, row)


def sending_again(server):
    guest = server.guest()
    lease = guest.take()
    before = stored(server)
    first = guest.review(lease, [mark_in(lease)], key='the-same-key')
    again = guest.review(lease, [mark_in(lease)], key='the-same-key')
    check('a review sent twice gets the same answer, marked as repeated',
          again.status == 201 and again.json == first.json and again.headers.get('Ebbmark-Repeated') == '1', again)
    check('and is stored once', stored(server)[0][0] == before[0][0] + 1)
    answer = guest.review(lease, [], key='the-same-key')
    check('the key of one review is refused for another: 422',
          answer.status == 422 and answer.fields == ['Idempotency-Key'], answer)
    answer = guest.review(lease, [], key='another-key')
    check('a lease that was used has had its review: 409',
          answer.status == 409 and answer.kind == 'lease_used', answer)
    other = server.guest()
    answer = other.review(other.take(), key='the-same-key')
    check('keys are each person\'s own', answer.status == 201 and answer.headers.get('Ebbmark-Repeated') is None, answer)
    check('still nothing more is stored', stored(server)[0][0] == before[0][0] + 2)


def leases(server):
    guest, other = server.guest(), server.guest()
    lease = guest.take()
    answer = other.review(lease)
    check('somebody else\'s lease: 403', answer.status == 403 and answer.kind == 'not_your_lease', answer)
    text = lease['lease']
    flipped = text[:-1] + ('A' if text[-1] != 'A' else 'B')
    middle = text[:40] + ('A' if text[40] != 'A' else 'B') + text[41:]
    for wrong in ('', 'x', flipped, middle, text + 'A', text[:-1], text.upper(), 'é' * 40):
        answer = guest.review(wrong)
        check(f'a lease that is not ours ({wrong[:12]!r}…) is refused, naming it',
              answer.status == 422 and answer.fields == ['lease'], answer)
    check('after all that the lease itself is still good', guest.review(lease).status == 201)
    check('nobody sends nothing: 401', server.client().review(lease).status == 401)


def keys(server):
    guest = server.guest()
    lease = guest.take()
    for key in (None, '', 'with blank', 'é', 'x' * 201, '\t'):
        answer = guest.post('/api/v1/reviews', {'lease': lease['lease'], 'marks': []},
                            headers={'Idempotency-Key': key and key.encode()})
        check(f'the key {str(key)[:12]!r} is refused: 400',
              answer.status == 400 and answer.kind == 'bad_request', answer)
    answer = guest.review(lease, key='~' * 200)
    check('a key of 200 visible characters is taken', answer.status == 201, answer)


def faults(server):
    guest = server.guest()
    lease = guest.take()
    starts, ends = lease['segment']['starts'], lease['segment']['ends']
    good = mark_in(lease)
    cases = [
        ([good, good, {**good, 'ends': good['starts'] - 1}], 'marks[2].ends'),
        ([{**good, 'ends': good['starts']}], 'marks[0].ends'),
        ([{**good, 'starts': starts - 0.02}], 'marks[0].starts'),
        ([{**good, 'ends': ends + 0.02}], 'marks[0].ends'),
        ([{**good, 'starts': starts - 0.009, 'ends': starts - 0.001}], 'marks[0].starts'),
        ([good, {**good, 'low': 1.5}], 'marks[1].low'),
        ([{**good, 'starts': '5'}], 'marks[0].starts'),
        ([{**good, 'high': None}], 'marks[0].high'),
        ([{**good, 'high': True}], 'marks[0].high'),
        ([{k: v for k, v in good.items() if k != 'low'}], 'marks[0].low'),
        ([{**good, 'certainty': 'perhaps'}], 'marks[0].certainty'),
        ([{**good, 'certainly': 'sure'}], 'marks[0].certainly'),
        ([good, 'a mark'], 'marks[1]'), ([[]], 'marks[0]'),
        ([good] * 51, 'marks'),
    ]
    for marks, field in cases:
        answer = guest.review(lease, marks)
        check(f'a fault in {field} is named', answer.status == 422 and answer.fields == [field], answer)
    for body, field in (({'marks': {}}, 'marks'), ({'marks': None}, 'marks'), ({'conditions': 'break'}, 'conditions'),
                        ({'conditions': ['break', 'cloudy']}, 'conditions[1]'), ({'conditions': [1]}, 'conditions[0]'),
                        ({'seconds': -1}, 'seconds'), ({'seconds': 86401}, 'seconds'), ({'seconds': '9'}, 'seconds'),
                        ({'lease': 5}, 'lease'), ({'comment': 'x'}, 'comment')):
        answer = guest.post('/api/v1/reviews', {'lease': lease['lease'], 'marks': [], **body},
                            headers={'Idempotency-Key': 'k'})
        check(f'a fault in {field} ({json.dumps(body)}) is named', answer.status == 422 and answer.fields == [field],
              answer)
    answer = guest.post('/api/v1/reviews', {'marks': [{}]}, headers={'Idempotency-Key': 'k'})
    check('all that is missing is named at once', sorted(answer.fields) ==
          ['lease', 'marks[0].ends', 'marks[0].high', 'marks[0].low', 'marks[0].starts'], answer)
    answer = guest.post('/api/v1/reviews', {'lease': lease['lease'], 'marks': [{}] * 50},
                        headers={'Idempotency-Key': 'k'})
    check('of very many faults some are named', answer.status == 422 and len(answer.fields) == 20, answer)
    server.admin.patch('/api/v1/campaign', {'marks_most': 2})
    answer = guest.review(lease, [good] * 3)
    check('the campaign may allow fewer marks', answer.status == 422 and answer.fields == ['marks'], answer)
    server.admin.patch('/api/v1/campaign', {'marks_most': 50})
    answer = guest.review(lease, [good] * 50)
    check('fifty marks are taken, after all those refusals', answer.status == 201, answer)


def hostile(server):
    guest = server.guest()
    lease = guest.take()['lease']
    head = f'{{"lease": "{lease}", "marks": '.encode()

    def send(body, **headers):
        return guest.ask('POST', '/api/v1/reviews', body, headers={'Idempotency-Key': 'k', **headers})
    for body, what in ((head, 'cut short'), (head + b'[{"starts": NaN}]}', 'NaN'), (head + b'[{"starts": Infinity}]}', 'Infinity'),
                       (head + b'[{"starts": 1e999}]}', 'a number past all bounds'), (b'', 'no body'), (b'{"marks": 1,}', 'a comma too many'),
                       (b'\xff\xfe{}', 'no UTF-8'), (head + b'"\xed\xa0\x80"}', 'half a character'),
                       (head + b'[], "marks": []}', 'a name twice'), (b'{"lease": "\\u0000"}', 'a NUL'),
                       (head + b'[' * 30000, 'very deep'), (b'[' * 60000, 'deeper still'),
                       (head + b'1' * 400 + b'}', 'an integer without end')):
        answer = send(body)
        check(f'a body with {what} is malformed: 400, saying where',
              answer.status == 400 and answer.kind == 'malformed_json' and 'line' in answer.json['detail'], answer)
    for body in (b'[]', b'7', b'"text"', b'null'):
        answer = send(body)
        check(f'the body {body.decode()} is no object', answer.status in (400, 422), answer)
    answer = send(b'{}', **{'Content-Type': 'text/plain'})
    check('another media type: 415', answer.status == 415 and answer.kind == 'unsupported_media_type', answer)
    answer = send(b'{"lease": "' + b'x' * 70000 + b'"}')
    check('a body over the limit: 413', answer.status == 413 and answer.kind == 'too_large', answer)
    check('the server lives on', guest.review(lease).status == 201)


def check_all(server):
    taking(server)
    sending_again(server)
    leases(server)
    keys(server)
    faults(server)
    hostile(server)
