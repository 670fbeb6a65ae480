"""/people: joining, and for admins who there is."""
from support import PASSPHRASE, check


def joining(server):
    one = server.client()
    answer = one.post('/api/v1/people', {})
    check('a guest joins without a handle or a passphrase and gets an invented handle',
          answer.status == 201 and answer.json['guest'] and answer.json['role'] == 'reviewer'
          and len(answer.json['handle']) > 3, answer)
    check('joining sets a session cookie that scripts and other sites cannot use',
          all(part in answer.headers['Set-Cookie'] for part in ('HttpOnly', 'SameSite=Strict', 'Path=/'))
          and 'Secure' not in answer.headers['Set-Cookie'], answer.headers['Set-Cookie'])
    check('the cookie is the person from then on', one.get('/api/v1/me').json == answer.json)
    check('a guest may join with no body at all', server.client().post('/api/v1/people').status == 201)
    answer = server.client().post('/api/v1/people', {'handle': None, 'passphrase': None})
    check('null is as good as missing', answer.status == 201 and answer.json['guest'], answer)
    answer = server.client().post('/api/v1/people', {'handle': 'marsh wren'})
    check('a guest may choose a handle', answer.status == 201 and answer.json['guest']
          and answer.json['handle'] == 'marsh wren', answer)
    answer = server.client().post('/api/v1/people', {'handle': 'Grebe', 'passphrase': PASSPHRASE})
    check('with a passphrase one is no guest', answer.status == 201 and not answer.json['guest'], answer)
    answer = server.client().post('/api/v1/people', {'handle': 'gREBE', 'passphrase': PASSPHRASE})
    check('a handle that reads like one that is taken is refused with 409',
          answer.status == 409 and answer.kind == 'conflict' and answer.fields == ['handle'], answer)


def refusals(server):
    client = server.client()
    for body, field in (({'passphrase': PASSPHRASE}, 'handle'),
                        ({'handle': '', 'passphrase': PASSPHRASE}, 'handle'),
                        ({'handle': 'x' * 33, 'passphrase': PASSPHRASE}, 'handle'),
                        ({'handle': ' heron', 'passphrase': PASSPHRASE}, 'handle'),
                        ({'handle': 'he\u200bron', 'passphrase': PASSPHRASE}, 'handle'),
                        ({'handle': 'heron', 'passphrase': 'short'}, 'passphrase'),
                        ({'handle': 'heron', 'passphrase': 'x' * 513}, 'passphrase'),
                        ({'handle': 7}, 'handle'), ({'handle': 'heron', 'passphrase': ['a']}, 'passphrase'),
                        ({'handel': 'heron'}, 'handel')):
        answer = client.post('/api/v1/people', body)
        check(f'joining with {str(body)[:60]} is refused, naming {field}',
              answer.status == 422 and answer.kind == 'invalid' and answer.fields == [field], answer)
    answer = client.post('/api/v1/people', {'handle': 1, 'passphrase': 2, 'more': 3})
    check('all fields at fault are named at once',
          sorted(answer.fields) == ['handle', 'more', 'passphrase'], answer)
    server.admin.patch('/api/v1/campaign', {'open_to_join': 0})
    answer = client.post('/api/v1/people', {})
    check('a campaign that is not open takes nobody: 403',
          answer.status == 403 and answer.kind == 'not_allowed', answer)
    server.admin.patch('/api/v1/campaign', {'open_to_join': 1})


def listing(server):
    admin = server.admin
    everybody = []
    path = '/api/v1/people?limit=2'
    while path:
        answer = admin.get(path)
        everybody += answer.json['people']
        path = answer.json['next'] and f'/api/v1/people?limit=2&cursor={answer.json["next"]}'
    ids = [person['person'] for person in everybody]
    whole = admin.get('/api/v1/people?limit=1000').json
    check('pages of two give the same people as one page, once each',
          everybody == whole['people'] and len(set(ids)) == len(ids) and whole['next'] is None, ids)
    check('the list says who is suspended',
          [p['handle'] for p in whole['people'] if p['suspended']] == ['lost'], whole['people'][:4])
    exactly = admin.get(f'/api/v1/people?limit={len(ids)}').json
    check('a page that holds all of them has no next', exactly['next'] is None, exactly['next'])
    for query in ('limit=0', 'limit=1001', 'limit=ten', 'limit=', 'cursor=x', 'cursor=-1', 'cursor=0',
                  'cursor=99999999999999999999'):
        answer = admin.get(f'/api/v1/people?{query}')
        check(f'{query} is refused, naming it',
              answer.status == 422 and answer.fields == [query.split('=')[0]], answer)


def roles(server):
    admin, guest = server.admin, server.guest()
    person = f'/api/v1/people/{guest.person}'
    check('a reviewer is not let into the candidates', guest.get('/api/v1/candidates').status == 403)
    answer = admin.patch(person, {'role': 'science'})
    check('an admin gives a role', answer.status == 200 and answer.json['role'] == 'science', answer)
    check('a session has the new role at once', guest.get('/api/v1/candidates').status == 200)
    admin.patch(person, {'role': 'reviewer'})
    check('a role taken away is gone at once', guest.get('/api/v1/candidates').status == 403)
    answer = admin.patch(person, {'suspended': True})
    check('an admin suspends somebody', answer.status == 200 and answer.json['suspended'], answer)
    answer = guest.post('/api/v1/leases')
    check('a suspended person is refused at once and told why',
          answer.status == 403 and answer.kind == 'suspended', answer)
    answer = admin.patch(person, {'suspended': False, 'role': 'science'})
    check('both can be changed together', not answer.json['suspended'] and answer.json['role'] == 'science',
          answer)
    check('an empty change changes nothing', admin.patch(person, {}).json == answer.json)
    for body, field in (({'role': 'owner'}, 'role'), ({'role': None}, 'role'), ({'suspended': 'yes'}, 'suspended'),
                        ({'handle': 'x'}, 'handle')):
        answer = admin.patch(person, body)
        check(f'{body} is refused, naming {field}', answer.status == 422 and answer.fields == [field], answer)
    for number in ('0', '999999', 'x', '-1', '1e3', '99999999999999999999'):
        check(f'there is no person {number}: 404',
              admin.patch(f'/api/v1/people/{number}', {'role': 'science'}).status == 404)
    me = admin.get('/api/v1/me').json['person']
    answer = admin.patch(f'/api/v1/people/{me}', {'role': 'reviewer'})
    check('nobody changes their own role', answer.status == 403 and answer.kind == 'not_allowed', answer)
    check('only admins list people', server.science.get('/api/v1/people').status == 403)


def check_all(server):
    joining(server)
    refusals(server)
    server.admin.patch(f'/api/v1/people/{server.ids["lost"]}', {'suspended': True})
    listing(server)
    roles(server)
