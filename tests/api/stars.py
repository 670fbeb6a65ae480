"""/stars: the list, one, and its light curve."""
import urllib.parse

from support import DIP, POINTS, check

AWKWARD = 'RB 0006/β+'


def check_all(server):
    science = server.science
    whole = science.get('/api/v1/stars').json
    check('all stars are listed', len(whole['stars']) == 6 and whole['next'] is None, whole)
    first = science.get('/api/v1/stars/RB-0001').json
    check('a star has what the catalogue knew', (first['ra'], first['dec'], first['magnitude'], first['temperature_k'],
          first['radius_rsun'], first['mass_msun']) == (209.25, -56.5, 13.5, 4500, 0.7, 0.65), first)
    other = science.get('/api/v1/stars/RB-0002').json
    check('what is not known is null', other['ra'] is None and other['magnitude'] is None, other)
    check('a star has its light curves', first['light_curves'] == 1 == len(first['curves'])
          and first['curves'][0]['points'] == POINTS and abs(first['curves'][0]['cadence'] * 48 - 1) < 1e-4, first)
    check('and says how much it was looked at', first['segments'] == 2 and first['reviews'] == 0, first)
    path, rows = '/api/v1/stars?limit=4', []
    while path:
        page = science.get(path).json
        rows += page['stars']
        path = page['next'] and f'/api/v1/stars?limit=4&cursor={page["next"]}'
    check('pages are the whole list', rows == whole['stars'])
    for query in ('limit=0', 'limit=1001', 'cursor=x'):
        answer = science.get(f'/api/v1/stars?{query}')
        check(f'{query} is refused, naming it', answer.status == 422 and answer.fields == [query.split('=')[0]], answer)
    name = urllib.parse.quote(AWKWARD, safe='')
    answer = science.get(f'/api/v1/stars/{name}')
    check('a star whose name has a blank, a slash and a Greek letter is found', answer.status == 200
          and answer.json['star'] == AWKWARD, answer)
    check('an unknown star: 404', science.get('/api/v1/stars/RB-9999').status == 404)
    curves(science, name)
    check('reviewers do not see stars by name: 403', server.guest().get('/api/v1/stars/RB-0001').status == 403)


def curves(science, awkward):
    path = '/api/v1/stars/RB-0001/light-curve'
    whole = science.get(path).json
    check('a light curve has every point', len(whole['times']) == len(whole['flux']) == len(whole['trend']) == POINTS
          and whole['time_reference'] != '' and whole['star'] == 'RB-0001')
    inside = [f for t, f in zip(whole['times'], whole['flux']) if DIP[0] < t < DIP[1]]
    check('the dip is in it', abs(sum(inside) / len(inside) - (1 - DIP[2])) < 0.002)
    check('the trend passes over the dip', all(abs(t - 1) < 0.005 for t in whole['trend']))
    part = science.get(f'{path}?from=5&to=5.25').json
    check('from and to cut a stretch out', part['times'] == [t for t in whole['times'] if 5 <= t <= 5.25])
    check('a stretch before the data is empty', science.get(f'{path}?to=-5').json['times'] == [])
    small = science.get(path, headers={'Accept-Encoding': 'gzip'})
    check('it comes compressed when accepted', small.headers.get('Content-Encoding') == 'gzip' and small.json == whole)
    for query, field in (('from=x', 'from'), ('to=nan', 'to'), ('from=1e300', 'from'), ('from=6&to=5', 'to')):
        answer = science.get(f'{path}?{query}')
        check(f'{query} is refused, naming {field}', answer.status == 422 and answer.fields == [field], answer)
    check('the awkward star has a light curve too', len(science.get(f'/api/v1/stars/{awkward}/light-curve').json['times']) == POINTS)
    check('an unknown star has none: 404', science.get('/api/v1/stars/RB-9999/light-curve').status == 404)
