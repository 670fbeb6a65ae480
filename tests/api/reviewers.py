"""/reviewers: skills, with their intervals."""
from support import check


def check_all(server):
    science = server.science
    empty = science.get('/api/v1/reviewers').json
    check('before a run there are none', empty == {'run': None, 'reviewers': []}, empty)
    server.review_everything(people=4)
    run = server.run_consensus()
    answer = science.get('/api/v1/reviewers').json
    check('after a run everybody who looked is there', answer['run'] == run['run'] and len(answer['reviewers']) == 4
          and all(r['looks'] == 12 and r['marks'] == 1 for r in answer['reviewers']), answer)
    check('each rate lies within its interval', all(
        r[rate]['low'] <= r[rate]['value'] <= r[rate]['high'] for r in answer['reviewers'] for rate in ('hit', 'chance')), answer)
    check('days looked at are the segments\' lengths', all(170 < r['days_looked'] < 200 for r in answer['reviewers']))
    check('an older run can be asked for', science.get(f'/api/v1/reviewers?run={run["run"]}').json == answer)
    check('a run that there is not: 404', science.get('/api/v1/reviewers?run=9').status == 404)
    refused = science.get('/api/v1/reviewers?run=x')
    check('run=x is refused, naming it', refused.status == 422 and refused.fields == ['run'], refused)
    check('reviewers do not see each other\'s skill: 403', server.guest().get('/api/v1/reviewers').status == 403)
