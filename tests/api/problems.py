"""/problems/{kind}: the address that a problem's type names is a page."""
from support import DESCRIBED, check


def check_all(server):
    client = server.client()
    for kind in DESCRIBED.whole['components']['schemas']['Problem']['properties']['type']['enum']:
        answer = client.get(kind)
        text = answer.body.decode()
        check(f'{kind} is a page that says what to do', answer.status == 200 and '<html lang="en">' in text
              and '<h1>' in text and kind in text and len(text) > 400, answer)
    answer = client.get('/problems/no_such_kind')
    check('there is no other kind: 404', answer.status == 404 and answer.kind == 'not_found', answer)
    answer = client.get('/problems/%3Cscript%3E')
    check('nothing of the address is repeated', b'script' not in answer.body, answer)
    answer = client.get('/no/such/address', before=True)
    check('an address that there is not: 404, as a problem', answer.status == 404 and answer.kind == 'not_found', answer)
    for method, path, allow in (('PUT', '/api/v1/me', {'GET', 'HEAD', 'PATCH', 'DELETE'}), ('DELETE', '/api/v1/leases', {'POST'})):
        answer = client.ask(method, path, before=True)
        check(f'{method} {path}: 405, with the methods that it takes', answer.status == 405
              and set(answer.headers['Allow'].replace(' ', '').split(',')) == allow, answer.headers.items())
