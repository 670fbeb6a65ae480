"""/healthz, /readyz and /metrics."""
import re

from support import check


def figures(text):
    found = {}
    for line in text.splitlines():
        if not line.startswith('#'):
            name, value = line.rsplit(' ', 1)
            found[name] = float(value)
    return found


def check_all(server):
    client = server.client()
    check('up', client.get('/healthz').json == {'status': 'up'})
    check('ready', client.get('/readyz').json == {'status': 'ready'})
    answer = client.get('/metrics')
    text = answer.body.decode()
    check('metrics are Prometheus text', answer.headers['Content-Type'].startswith('text/plain; version=0.0.4'))
    lines = [line for line in text.splitlines() if not line.startswith('#')]
    names = {re.match(r'[a-z_]+', line).group(0) for line in lines}
    check('every line is a sample with a number', all(
        re.fullmatch(r'ebbmark_[a-z_]+(\{[a-z]+="[^"]*"\})? -?[0-9.e+-]+', line) for line in lines), text[:500])
    check('every metric has its help and its kind, once', all(
        text.count(f'# HELP {name} ') == 1 and text.count(f'# TYPE {name} ') == 1 for name in names))
    check('counters are called totals', all(name.endswith('_total') == (f'# TYPE {name} counter' in text) for name in names))
    before = figures(text)
    check('at first nothing was taken', before['ebbmark_reviews_taken_total'] == 0 and before['ebbmark_segments_open'] == 12
          and before['ebbmark_stored_stars'] == 6 and before['ebbmark_run_newest'] == 0)
    guest = server.guest()
    lease = guest.take()
    guest.take()
    guest.get(lease['segment']['flux'])
    guest.get(lease['segment']['flux'])
    guest.review(lease)
    server.run_consensus()
    after = figures(client.get('/metrics').body.decode())
    check('what was done is counted', after['ebbmark_reviews_taken_total'] == 1 and after['ebbmark_leases_given_total'] == 2
          and after['ebbmark_leases_out'] == 1 and after['ebbmark_flux_found_total'] == 1
          and after['ebbmark_flux_missed_total'] == 1 and after['ebbmark_runs_done_total'] == 1
          and after['ebbmark_run_newest'] == 1 and after['ebbmark_run_newest_reviews'] == 1, after)
    check('answers are counted by status', after['ebbmark_http_answers_total{class="2"}'] >= 8)
    check('nobody is named in it', guest.handle not in text and 'RB-0001' not in text)
