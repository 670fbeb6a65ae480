"""/campaign: the settings."""
from support import check


def settings(client):
    return {row['name']: row for row in client.get('/api/v1/campaign').json['settings']}


def check_all(server):
    admin = server.admin
    before = settings(admin)
    check('settings stand with their default, range, unit and sentence', all(
        row['least'] <= row['default'] <= row['most'] and row['value'] == row['default'] and row['sentence'].endswith('.')
        for row in before.values()) and len(before) >= 10, before)
    answer = admin.patch('/api/v1/campaign', {'lease_minutes': 20})
    check('a setting is changed', answer.status == 200 and settings(admin)['lease_minutes']['value'] == 20, answer)
    check('the answer has all settings', [r['name'] for r in answer.json['settings']] == list(before))
    answer = admin.patch('/api/v1/campaign', {'looks_least': 20, 'looks_most': 30})
    check('two that need each other are changed together, in whatever order',
          answer.status == 200 and settings(admin)['looks_least']['value'] == 20, answer)
    answer = admin.patch('/api/v1/campaign', {'looks_most': 12, 'looks_least': 6})
    check('and back', answer.status == 200 and settings(admin)['looks_most']['value'] == 12, answer)
    answer = admin.patch('/api/v1/campaign', {'segment_days': 27.5})
    check('a length may be no whole number', answer.status == 200 and settings(admin)['segment_days']['value'] == 27.5)
    now = settings(admin)
    for body, fields in (({'lease_minutes': 0}, ['lease_minutes']), ({'lease_minutes': 1441}, ['lease_minutes']),
                         ({'lease_minutes': 2.5}, ['lease_minutes']), ({'lease_minutes': '20'}, ['lease_minutes']),
                         ({'lease_minutes': None}, ['lease_minutes']), ({'open_to_join': True}, ['open_to_join']),
                         ({'lease_hours': 1}, ['lease_hours']), ({'lease_minutes': 10, 'marks_most': 0}, ['marks_most']),
                         ({'lease_minutes': 10, 'looks_least': 13}, ['looks_least']),
                         ({'marks_most': 0, 'looks_most': 0, 'x': 1}, ['looks_most', 'marks_most', 'x'])):
        answer = admin.patch('/api/v1/campaign', body)
        check(f'{body} is refused, naming {", ".join(fields)}', answer.status == 422 and sorted(answer.fields) == fields, answer)
        check(f'and nothing of {body} is changed', settings(admin) == now)
    check('settings survive a restart', server.stop() == 0)
    server.start()
    check('with their values', settings(server.admin) == now)
    check('the science team does not change settings: 403', server.science.get('/api/v1/campaign').status == 403
          and server.science.patch('/api/v1/campaign', {}).status == 403)
