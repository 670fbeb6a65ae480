"""/leases: being handed segments."""
import datetime

from support import POINTS, check


def check_all(server):
    guest = server.guest()
    answer = guest.post('/api/v1/leases')
    lease = answer.json
    check('a reviewer is handed a segment', answer.status == 201, answer)
    segment = lease['segment']
    check('a lease is short enough for a header', len(lease['lease']) < 140, len(lease['lease']))
    check('the segment\'s id says nothing of order', len(segment['id']) == 16 and int(segment['id'], 16) >= 0)
    check('the segment has its stretch and its points', segment['ends'] - segment['starts'] > 10
          and 100 < segment['points'] < POINTS and segment['time_reference'] != '', segment)
    check('the segment names where its flux is', segment['flux'] == f'/api/v1/segments/{segment["id"]}/flux')
    expires = datetime.datetime.fromisoformat(lease['expires'].replace('Z', '+00:00'))
    minutes = (expires - datetime.datetime.now(datetime.timezone.utc)).total_seconds() / 60
    check('a lease lasts as long as the setting says', 14 < minutes <= 15, minutes)
    seen = {segment['id']}
    check('an empty object is as good as no body', guest.post('/api/v1/leases', {}).status == 201)
    answer = guest.post('/api/v1/leases', {'star': 'RB-0001'})
    check('nobody chooses what to look at', answer.status == 422 and answer.fields == ['star'], answer)
    another = server.guest()
    handed = []
    while (lease := another.take()) is not None:
        handed.append(lease['segment']['id'])
        assert len(handed) < 50
    check('nobody is handed the same segment twice', len(set(handed)) == len(handed) == 12, handed)
    answer = another.post('/api/v1/leases')
    check('when nothing is left for a person: 204 without a body', answer.status == 204 and answer.body == b'')
    check('others still get some', guest.take()['segment']['id'] not in seen)
    check('nobody gets a segment without joining', server.client().post('/api/v1/leases').status == 401)
    check('the science team may look too', server.science.post('/api/v1/leases').status == 201)
