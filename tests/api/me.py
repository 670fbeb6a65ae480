"""/me: who I am, my record, leaving."""
from support import DIP, PASSPHRASE, check


def changing(server):
    guest = server.guest()
    check('credit is not given unasked', guest.get('/api/v1/me').json['credit'] is False)
    answer = guest.patch('/api/v1/me', {'credit': True})
    check('consent to credit can be given', answer.status == 200 and answer.json['credit'] is True, answer)
    check('and taken back', guest.patch('/api/v1/me', {'credit': False}).json['credit'] is False)
    answer = guest.patch('/api/v1/me', {'passphrase': PASSPHRASE})
    check('a guest chooses a passphrase later and is none any more',
          answer.status == 200 and answer.json['guest'] is False, answer)
    again = server.client().post('/api/v1/sessions', {'handle': guest.handle, 'passphrase': PASSPHRASE})
    check('and signs in with it elsewhere', again.status == 201 and again.json['person'] == guest.person, again)
    for body, fields in (({'credit': 1}, ['credit']), ({'passphrase': 'short'}, ['passphrase']),
                         ({'passphrase': 5}, ['passphrase']), ({'handle': 'x'}, ['handle']),
                         ({'credit': None}, ['credit']),
                         ({'role': 'admin', 'credit': 'yes'}, ['credit', 'role'])):
        answer = guest.patch('/api/v1/me', body)
        check(f'{body} is refused, naming {", ".join(fields)}',
              answer.status == 422 and sorted(answer.fields) == fields, answer)
    check('nobody is nobody: 401', server.client().get('/api/v1/me').status == 401)


def recording(server):
    newcomer = server.guest().get('/api/v1/me/record').json
    check('a newcomer\'s record is empty', newcomer['totals']['looks'] == 0 and newcomer['totals']['first'] is None
          and newcomer['skill'] is None and newcomer['reviews'] == [] and newcomer['candidates'] == [], newcomer)
    client = server.review_everything(people=4)[0]
    record = client.get('/api/v1/me/record').json
    check('the record counts looks, marks and days', record['totals']['looks'] == 12
          and record['totals']['marks'] == 1 and 170 < record['totals']['days_looked'] < 200, record['totals'])
    check('before a run nothing is said of skill', record['skill'] is None)
    server.run_consensus()
    record = client.get('/api/v1/me/record').json
    skill = record['skill']
    check('after a run there is a skill with its interval',
          skill and skill['hit']['low'] <= skill['hit']['value'] <= skill['hit']['high'], skill)
    check('the candidate that my mark is part of is in my record',
          len(record['candidates']) == 1 and DIP[0] < record['candidates'][0]['mid_time'] < DIP[1]
          and record['candidates'][0]['star'] == 'RB-0001', record['candidates'])
    check('with the caution', 'not a confirmed planet' in record['caution'])
    paged, path = [], '/api/v1/me/record?limit=5'
    while path:
        page = client.get(path).json
        paged += page['reviews']
        path = page['next'] and f'/api/v1/me/record?limit=5&cursor={page["next"]}'
    check('pages of my reviews are the whole, newest first', paged == record['reviews']
          and [r['review'] for r in paged] == sorted((r['review'] for r in paged), reverse=True))
    marked = [r for r in record['reviews'] if r['marks']]
    check('my marks are in it as I drew them', len(marked) == 1
          and abs(marked[0]['marks'][0]['starts'] - DIP[0]) < 1e-9
          and marked[0]['marks'][0]['certainty'] == 'sure', marked)
    for query in ('limit=0', 'limit=1001', 'cursor=a'):
        answer = client.get(f'/api/v1/me/record?{query}')
        check(f'{query} is refused', answer.status == 422 and answer.fields == [query.split('=')[0]], answer)
    return client


def leaving(server, client):
    handle = client.get('/api/v1/me').json['handle']
    secret = client.cookie
    answer = client.delete('/api/v1/me')
    check('leaving ends the session', answer.status == 204 and client.cookie is None, answer)
    client.cookie = secret
    check('the cookie of whoever left is nobody\'s', client.get('/api/v1/me').status == 401)
    people = server.admin.get('/api/v1/people?limit=1000').json['people']
    left = [p for p in people if p['left']]
    check('the handle is gone', len(left) == 1 and left[0]['handle'] == '' and handle not in str(people), left)
    answer = server.admin.patch(f'/api/v1/people/{left[0]["person"]}', {'role': 'science'})
    check('whoever left gets no role any more', answer.status == 404, answer)
    candidate = server.science.get('/api/v1/candidates').json['candidates'][0]
    dossier = server.science.get(f'/api/v1/candidates/{candidate["candidate"]}').json
    check('their marks stay, without the handle',
          [m['handle'] for m in dossier['marked_by'] if m['person'] == left[0]['person']] == [None],
          dossier['marked_by'])


def check_all(server):
    changing(server)
    client = recording(server)
    leaving(server, client)
