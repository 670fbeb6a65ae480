"""/candidates: the list, its filters, orders, pages and files; one of them. How probable the model finds each is
not looked at here: that is for the checks of the model."""
import csv
import io
import warnings

from support import DIP, check, marks_of, skip


def nothing_yet(server):
    answer = server.science.get('/api/v1/candidates')
    check('before any run there is an empty list', answer.json['run'] is None and answer.json['total'] == 0
          and answer.json['candidates'] == [] and answer.json['next'] is None, answer)
    answer = server.science.get('/api/v1/candidates?format=csv')
    check('and a table with a header alone', answer.status == 200 and answer.body.count(b'\n') == 1
          and answer.body.startswith(b'candidate,'), answer)
    check('and no run 1', server.science.get('/api/v1/candidates?run=1').status == 404)
    check('and no candidate 1', server.science.get('/api/v1/candidates/1').status == 404)


def crowd(server):
    """The dip marked by eleven, and five chance marks elsewhere, so that there is something to sort."""
    server.review_everything()
    for number in range(5):
        guest = server.guest()
        lease = guest.take()
        starts = lease['segment']['starts'] + 2 + number
        chance = {'starts': starts, 'ends': starts + 0.2 + 0.05 * number, 'low': 0.99, 'high': 1.0}
        guest.review(lease, [*marks_of(guest, lease, number), chance])
        while (lease := guest.take()) is not None:
            guest.review(lease, marks_of(guest, lease, number))
    return server.run_consensus()


def the_dip(rows):
    return [row for row in rows if row['star'] == 'RB-0001' and DIP[0] < row['mid_time'] < DIP[1]][0]


def listing(server, run):
    science = server.science
    whole = science.get('/api/v1/candidates').json
    dip = the_dip(whole['candidates'])
    check('the dip that all marked is one candidate', dip['looks'] == dip['marks'] == 11, dip)
    check('its depth and length are those that were put in', abs(dip['depth_ppm'] / (DIP[2] * 1e6) - 1) < 0.1
          and abs(dip['duration_h'] - 6) < 1.5, (dip['depth_ppm'], dip['duration_h']))
    check('what the catalogue knew is in it', dip['ra'] == 209.25 and dip['dec'] == -56.5 and dip['batch'] == 'Reedbed')
    check('the list names its run', whole['run']['run'] == run['run'] and whole['run']['reviews'] == run['reviews'])
    check('its caution is shown', 'not a confirmed planet' in whole['caution'])
    check('the total is all of them', whole['total'] == len(whole['candidates']) == run['candidates'] >= 4, whole['total'])
    return whole


ORDERS = {'probability': 'probability', 'snr': 'snr', 'depth': 'depth_ppm', 'duration': 'duration_h', 'star': 'star',
          'time': 'mid_time', 'looks': 'looks', 'marks': 'marks'}


def orders(server):
    science = server.science
    for name, column in ORDERS.items():
        for sign in ('', '-'):
            rows = science.get(f'/api/v1/candidates?sort={sign}{name}').json['candidates']
            values = [row[column] for row in rows if row[column] is not None]
            check(f'sort={sign}{name} sorts by {column}', values == sorted(values, reverse=sign == '-')
                  and all(row[column] is None for row in rows[len(values):]), values)


def filters(server, whole):
    science = server.science
    rows = whole['candidates']
    middle = sorted(row['probability'] for row in rows)[len(rows) // 2]
    for least in (0, repr(middle), 1):
        got = science.get(f'/api/v1/candidates?min_probability={least}').json
        check(f'min_probability={least} leaves out the others', got['candidates'] ==
              [row for row in rows if row['probability'] >= float(least)] and got['total'] == len(got['candidates']))
    got = science.get('/api/v1/candidates?star=RB-0001').json
    check('star picks a star\'s', got['total'] >= 1 and {row['star'] for row in got['candidates']} == {'RB-0001'})
    check('an unknown star has none', science.get('/api/v1/candidates?star=RB-9999').json['total'] == 0)
    check('a star\'s name that reads like SQL is only a name',
          science.get("/api/v1/candidates?star=x'%20OR%20'1'='1").json['total'] == 0)
    check('batch picks a batch\'s', science.get('/api/v1/candidates?batch=Reedbed').json['total'] == whole['total'])
    check('another batch has none', science.get('/api/v1/candidates?batch=other').json['total'] == 0)
    check('run picks a run', science.get(f'/api/v1/candidates?run={whole["run"]["run"]}').json == whole)
    for query in ('min_probability=2', 'min_probability=-0.1', 'min_probability=nan', 'min_probability=x', 'sort=colour',
                  'sort=', 'sort=--snr', 'verdict=maybe', 'run=0', 'run=x', 'limit=0', 'limit=1001', 'format=fits',
                  'cursor=x', 'cursor=1.1.0000000000000000', 'cursor=1.0.', 'cursor=-1', 'min_probabilty=0.5', 'x=y'):
        answer = science.get(f'/api/v1/candidates?{query}')
        check(f'{query} is refused, naming it', answer.status == 422 and answer.fields == [query.split('=')[0]], answer)
    check('a run that there is not: 404', science.get('/api/v1/candidates?run=99').status == 404)


def pages(server, whole):
    science = server.science
    path, rows = '/api/v1/candidates?limit=2', []
    first = science.get(path).json
    cursor = first['next']
    while path:
        page = science.get(path).json
        check('each page says the same total', page['total'] == whole['total'])
        rows += page['candidates']
        path = page['next'] and f'/api/v1/candidates?limit=2&cursor={page["next"]}'
    check('pages of two are the whole list in its order', rows == whole['candidates'])
    answer = science.get(f'/api/v1/candidates?limit=2&sort=snr&cursor={cursor}')
    check('a cursor is no good for another question', answer.status == 422 and answer.fields == ['cursor'], answer)
    exactly = science.get(f'/api/v1/candidates?limit={whole["total"]}').json
    check('a page that holds all of them has no next', exactly['next'] is None)
    newer = server.run_consensus()
    page = science.get(f'/api/v1/candidates?limit=2&cursor={cursor}').json
    check('a list that was begun goes on in its own run, whatever has run since',
          newer['run'] > whole['run']['run'] and page['run'] == whole['run'] and page['candidates'] == rows[2:4], page['run'])


def files(server):
    science = server.science
    whole = science.get('/api/v1/candidates').json['candidates']
    answer = science.get('/api/v1/candidates?format=csv')
    check('the CSV is a file of its type', answer.headers['Content-Type'].startswith('text/csv')
          and 'candidates.csv' in answer.headers['Content-Disposition'], answer.headers.items())
    rows = list(csv.DictReader(io.StringIO(answer.body.decode())))
    check('the CSV has every candidate, in the list\'s order', [int(row['candidate']) for row in rows]
          == [row['candidate'] for row in whole])
    check('and every column that the JSON has', list(rows[0]) == list(whole[0]))
    check('with the same values', all(abs(float(a['probability']) - b['probability']) < 1e-5
                                      and a['star'] == b['star'] for a, b in zip(rows, whole)))
    answer = science.get('/api/v1/candidates', headers={'Accept': 'text/csv'})
    check('Accept asks for it as well', answer.headers['Content-Type'].startswith('text/csv'))
    question = f'min_probability={whole[2]["probability"]!r}&sort=star'
    wanted = science.get(f'/api/v1/candidates?{question}').json['candidates']
    answer = science.get(f'/api/v1/candidates?format=csv&{question}', headers={'Accept': 'application/json'})
    rows = list(csv.DictReader(io.StringIO(answer.body.decode())))
    check('filters and orders hold for files too', 3 <= len(rows) == len(wanted)
          and [int(r['candidate']) for r in rows] == [r['candidate'] for r in wanted], len(rows))
    answer = science.get('/api/v1/candidates?limit=1&format=csv')
    check('a file is always whole', answer.body.count(b'\n') == len(whole) + 1)
    answer = science.get('/api/v1/candidates', headers={'Accept': 'application/pdf'})
    check('another media type: 406', answer.status == 406 and answer.kind == 'not_acceptable', answer)
    answer = science.get('/api/v1/candidates?format=json', headers={'Accept': 'application/pdf'})
    check('the format in the address counts more', answer.status == 200 and answer.json['total'] == len(whole))
    answer = science.get('/api/v1/candidates?format=votable')
    try:
        from astropy.io.votable import parse_single_table
    except ImportError:
        skip('the VOTable is read by astropy', 'astropy is not installed')
        return
    with warnings.catch_warnings():
        warnings.simplefilter('ignore')
        table = parse_single_table(io.BytesIO(answer.body)).to_table()
    check('the VOTable is read by astropy and has every candidate', list(table['candidate'])
          == [row['candidate'] for row in whole])
    check('it carries the caution', b'not a confirmed planet' in answer.body)


def one(server):
    science = server.science
    top = the_dip(science.get('/api/v1/candidates').json['candidates'])
    answer = science.get(f'/api/v1/candidates/{top["candidate"]}')
    dossier = answer.json
    check('a candidate has its row', all(dossier[name] == value for name, value in top.items()), answer)
    check('and who marked it, with their boxes and weights', len(dossier['marked_by']) == top['marks']
          and all(abs(m['starts'] - DIP[0]) < 0.1 and m['handle'] and m['weight'] >= 0 for m in dossier['marked_by']),
          dossier['marked_by'])
    check('and why its probability is what it is', all(isinstance(v, float) for v in dossier['terms'].values())
          and abs(sum(dossier['terms'].values()) - dossier['log_odds']) < 1e-6 * abs(dossier['log_odds']) + 1e-6,
          (dossier['terms'], dossier['log_odds']))
    check('and the caution', 'not a confirmed planet' in dossier['caution'])
    check('its runs are kept', science.get(f'/api/v1/candidates/{top["candidate"]}?run=1').json['run'] == 1)
    check('another run: 404', science.get(f'/api/v1/candidates/{top["candidate"]}?run=77').status == 404)
    answer = science.get(f'/api/v1/candidates/{top["candidate"]}?run=x')
    check('run=x is refused, naming it', answer.status == 422 and answer.fields == ['run'], answer)
    for wrong in ('0', '999999', 'top', '-1'):
        check(f'there is no candidate {wrong}: 404', science.get(f'/api/v1/candidates/{wrong}').status == 404)


def check_all(server):
    nothing_yet(server)
    run = crowd(server)
    whole = listing(server, run)
    orders(server)
    filters(server, whole)
    pages(server, whole)
    files(server)
    one(server)
