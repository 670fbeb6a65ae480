"""/sessions: signing in and out."""
from support import PASSPHRASE, check


def signing_in(server):
    client = server.client()
    client.post('/api/v1/people', {'handle': 'Little Owl', 'passphrase': PASSPHRASE})
    other = server.client()
    answer = other.post('/api/v1/sessions', {'handle': 'little owl', 'passphrase': PASSPHRASE})
    check('whoever has a handle and its passphrase signs in, however the handle is spelled',
          answer.status == 201 and answer.json['handle'] == 'Little Owl' and other.cookie, answer)
    check('both sessions hold', client.get('/api/v1/me').json == other.get('/api/v1/me').json)
    check('the two sessions have secrets of their own', client.cookie != other.cookie)
    wrong = other.post('/api/v1/sessions', {'handle': 'little owl', 'passphrase': 'not this one at all'})
    nobody = other.post('/api/v1/sessions', {'handle': 'no such owl', 'passphrase': PASSPHRASE})
    check('a wrong passphrase: 401', wrong.status == 401 and wrong.kind == 'wrong_passphrase', wrong)
    check('an unknown handle gets the very same answer',
          (nobody.status, nobody.json) == (wrong.status, wrong.json), nobody)
    check('a failed sign-in leaves the session that there was', other.get('/api/v1/me').status == 200)
    guest = server.guest()
    answer = server.client().post('/api/v1/sessions', {'handle': guest.handle, 'passphrase': PASSPHRASE})
    check('nobody signs in as a guest', answer.status == 401, answer)
    for body, fields in (({}, ['handle', 'passphrase']), ({'handle': 'x'}, ['passphrase']),
                         ({'handle': None, 'passphrase': 'x'}, ['handle']),
                         ({'handle': 'x', 'passphrase': 5}, ['passphrase']),
                         ({'handle': 'x', 'passphrase': 'y', 'remember': True}, ['remember']),
                         ({'handle': 'x', 'passphrase': 'y' * 5000}, ['passphrase'])):
        answer = server.client().post('/api/v1/sessions', body)
        check(f'signing in with {str(body)[:50]} is refused, naming {", ".join(fields)}',
              answer.status == 422 and sorted(answer.fields) == fields, answer)
    return client


def suspended(server, client):
    person = client.get('/api/v1/me').json['person']
    server.admin.patch(f'/api/v1/people/{person}', {'suspended': True})
    answer = server.client().post('/api/v1/sessions', {'handle': 'little owl', 'passphrase': PASSPHRASE})
    check('a suspended person with the right passphrase is told so',
          answer.status == 403 and answer.kind == 'suspended' and answer.headers.get('Set-Cookie') is None, answer)
    answer = server.client().post('/api/v1/sessions', {'handle': 'little owl', 'passphrase': 'not this one at all'})
    check('with a wrong passphrase nobody learns who is suspended',
          answer.status == 401 and answer.kind == 'wrong_passphrase', answer)
    server.admin.patch(f'/api/v1/people/{person}', {'suspended': False})


def signing_out(server):
    guest = server.guest()
    secret = guest.cookie
    answer = guest.delete('/api/v1/sessions/current')
    check('signing out ends the session and clears the cookie',
          answer.status == 204 and guest.cookie is None and 'Max-Age=0' in answer.headers['Set-Cookie'], answer)
    guest.cookie = secret
    check('the old cookie is nobody\'s from then on', guest.get('/api/v1/me').status == 401)
    check('signing out twice is no failure', guest.delete('/api/v1/sessions/current').status == 204)
    check('nor is it without any session', server.client().delete('/api/v1/sessions/current').status == 204)
    answer = server.science.delete('/api/v1/sessions/current')
    check('a token is no session: 400, and it goes on', answer.status == 400
          and server.science.get('/api/v1/me').status == 200, answer)


def check_all(server):
    client = signing_in(server)
    suspended(server, client)
    signing_out(server)
