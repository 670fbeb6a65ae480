"""/consensus-runs: starting, watching and listing runs."""
from support import check


def starting(server):
    science = server.science
    state = science.get('/api/v1/consensus-runs/current').json
    check('at first nothing is at work and there is no run', state['state'] == 'idle' and state['newest'] is None, state)
    check('and the list is empty', science.get('/api/v1/consensus-runs').json == {'runs': [], 'next': None})
    server.review_everything(people=3)
    answer = science.post('/api/v1/consensus-runs')
    check('a run is started: 202, and where to watch it', answer.status == 202 and answer.json['state'] == 'working'
          and answer.headers['Location'] == '/api/v1/consensus-runs/current', answer)
    newest = server.run_consensus()
    check('the run counts all reviews and people', newest['reviews'] == 36 and newest['people'] == 3, newest)
    check('it has begun and finished', newest['begun'] <= newest['finished'], newest)
    for _ in range(50):
        first = science.post('/api/v1/consensus-runs')
        second = science.post('/api/v1/consensus-runs')
        if second.status == 409:
            break
    check('a second one at the same time: 409', second.status == 409 and second.kind == 'conflict', (first, second))
    server.run_consensus()
    answer = science.post('/api/v1/consensus-runs', {'all': True})
    check('a run takes no settings here', answer.status == 422 and answer.fields == ['all'], answer)
    check('reviewers start none: 403', server.guest().post('/api/v1/consensus-runs').status == 403)


def listing(server):
    science = server.science
    whole = science.get('/api/v1/consensus-runs').json['runs']
    numbers = [run['run'] for run in whole]
    check('runs are listed newest first', len(numbers) >= 2 and numbers == sorted(numbers, reverse=True), numbers)
    path, rows = '/api/v1/consensus-runs?limit=1', []
    while path:
        page = science.get(path).json
        rows += page['runs']
        path = page['next'] and f'/api/v1/consensus-runs?limit=1&cursor={page["next"]}'
    check('pages are the whole list', rows == whole)
    for query in ('limit=0', 'cursor=x'):
        answer = science.get(f'/api/v1/consensus-runs?{query}')
        check(f'{query} is refused, naming it', answer.status == 422 and answer.fields == [query.split('=')[0]], answer)
    one = science.get(f'/api/v1/consensus-runs/{numbers[-1]}').json
    check('one run has its settings and how its fit went', one['run'] == numbers[-1] and one['settings'] and one['fit'], one)
    same = [science.get(f'/api/v1/candidates?run={number}').json['candidates'] for number in numbers[-2:]]
    check('two runs over the same reviews give the same candidates',
          [{**row, 'run': 0} for row in same[0]] == [{**row, 'run': 0} for row in same[1]] and same[0])
    for wrong in ('0', '99', 'newest'):
        check(f'there is no run {wrong}: 404', science.get(f'/api/v1/consensus-runs/{wrong}').status == 404)


def check_all(server):
    starting(server)
    listing(server)
