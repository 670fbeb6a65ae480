"""/batches: what was loaded; withdrawing."""
from support import POINTS, check


def check_all(server):
    admin = server.admin
    batches = admin.get('/api/v1/batches').json['batches']
    batch = batches[0]
    check('the batch is listed with what came of it', len(batches) == 1 and batch['name'] == 'Reedbed'
          and batch['state'] == 'ready' and batch['files'] == {'loaded': 6, 'repeated': 0, 'refused': 1}
          and batch['stars'] == 6 and batch['segments'] == 12 and batch['points'] == 6 * POINTS, batch)
    path = f'/api/v1/batches/{batch["batch"]}'
    one = admin.get(path).json
    check('one batch has each file\'s outcome', all(one[name] == batch[name] for name in batch)
          and sorted(f['outcome'] for f in one['outcomes']) == ['loaded'] * 6 + ['refused'], one)
    refused = [f for f in one['outcomes'] if f['outcome'] == 'refused'][0]
    check('a refused file has its reason', refused['label'].endswith('broken.csv') and refused['reason'].endswith('.'), refused)
    pages, address = [], f'{path}?limit=3'
    while address:
        page = admin.get(address).json
        pages += page['outcomes']
        address = page['next'] and f'{path}?limit=3&cursor={page["next"]}'
    check('pages of files are all of them', pages == one['outcomes'])
    for query in ('limit=0', 'cursor=x'):
        answer = admin.get(f'{path}?{query}')
        check(f'{query} is refused, naming it', answer.status == 422 and answer.fields == [query.split('=')[0]], answer)
    for wrong in ('0', '99', 'Reedbed'):
        check(f'there is no batch {wrong}: 404', admin.get(f'/api/v1/batches/{wrong}').status == 404
              and admin.post(f'/api/v1/batches/{wrong}/withdrawal').status == 404)
    check('the science team has no say in batches: 403', server.science.get(path).status == 403
          and server.science.post(f'{path}/withdrawal').status == 403)
    guest = server.guest()
    lease = guest.take()
    answer = admin.post(f'{path}/withdrawal', {'why': 'x'})
    check('a withdrawal takes no members', answer.status == 422 and answer.fields == ['why'], answer)
    answer = admin.post(f'{path}/withdrawal')
    check('a batch is withdrawn', answer.status == 200 and answer.json['state'] == 'withdrawn', answer)
    check('its segments are handed out no more', guest.take() is None)
    check('but a review of one that is out is still taken', guest.review(lease).status == 201)
    check('withdrawing twice changes nothing', admin.post(f'{path}/withdrawal').json['state'] == 'withdrawn')
