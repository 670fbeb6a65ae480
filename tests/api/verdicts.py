"""/candidates/{id}/verdicts: the science team's say."""
from support import check


def check_all(server):
    science = server.science
    server.review_everything(people=4)
    server.run_consensus()
    candidate = science.get('/api/v1/candidates').json['candidates'][0]['candidate']
    path = f'/api/v1/candidates/{candidate}/verdicts'
    first = science.post(path, {'verdict': 'keep', 'note': 'A clean dip.\nLooks good.'})
    check('a verdict is given', first.status == 201 and first.json['verdict'] == 'keep' and first.json['handle'] == 'dora'
          and first.json['candidate'] == candidate, first)
    check('without a note too', science.post(path, {'verdict': 'unsure'}).json['note'] == '')
    dossier = science.get(f'/api/v1/candidates/{candidate}').json
    check('all verdicts are kept, the latest counts', [v['verdict'] for v in dossier['verdicts']] == ['keep', 'unsure']
          and dossier['verdict'] == 'unsure' and dossier['verdicts'][0]['note'] == 'A clean dip.\nLooks good.', dossier)
    check('the list can be filtered by it', science.get('/api/v1/candidates?verdict=unsure').json['total'] == 1
          and science.get('/api/v1/candidates?verdict=keep').json['total'] == 0)
    others = science.get('/api/v1/candidates?verdict=none').json['candidates']
    check('none picks those without one', candidate not in [row['candidate'] for row in others])
    newest = server.run_consensus()
    after = science.get(f'/api/v1/candidates/{candidate}').json
    check('a verdict follows its candidate into the next run', after['run'] == newest['run'] and after['verdict'] == 'unsure')
    for body, fields in (({}, ['verdict']), ({'verdict': 'yes'}, ['verdict']), ({'verdict': None}, ['verdict']),
                         ({'verdict': 'keep', 'note': 5}, ['note']), ({'verdict': 'keep', 'note': 'x' * 4001}, ['note']),
                         ({'verdict': 'keep', 'notes': 'x'}, ['notes'])):
        answer = science.post(path, body)
        check(f'{str(body)[:40]} is refused, naming {fields[0]}', answer.status == 422 and answer.fields == fields, answer)
    check('a note of 4000 bytes is taken', science.post(path, {'verdict': 'reject', 'note': 'x' * 4000}).status == 201)
    check('there is no candidate 999999: 404', science.post('/api/v1/candidates/999999/verdicts', {'verdict': 'keep'}).status == 404)
    check('there is no candidate x: 404', science.post('/api/v1/candidates/x/verdicts', {'verdict': 'keep'}).status == 404)
    check('a reviewer gives no verdicts: 403', server.guest().post(path, {'verdict': 'keep'}).status == 403)
