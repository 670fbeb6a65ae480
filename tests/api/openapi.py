"""The description itself, and what it says that all operations do alike."""
import json

from support import DESCRIBED, check


def itself(server):
    client = server.client()
    answer = client.get('/api/v1/openapi.json')
    check('the description is served as it is in the source', answer.json == DESCRIBED.whole)
    again = client.get('/api/v1/openapi.json', headers={'If-None-Match': answer.headers['ETag']})
    check('and not sent again to whoever has it', again.status == 304, again)
    check('it is OpenAPI 3.1 with a name for every operation', answer.json['openapi'].startswith('3.1')
          and len({o['operationId'] for ops in answer.json['paths'].values() for o in ops.values()})
          == sum(len(ops) for ops in answer.json['paths'].values()))
    for name, schema in DESCRIBED.whole['components']['schemas'].items():
        try:
            import jsonschema
            jsonschema.Draft202012Validator.check_schema(schema)
            sound = True
        except jsonschema.SchemaError as error:
            sound = str(error)[:200]
        check(f'{name} is a sound schema', sound is True, sound)


def operations():
    for template, ops in DESCRIBED.whole['paths'].items():
        path = template
        for name in ('id', 'name', 'kind'):
            path = path.replace('{' + name + '}', '1')
        for method, operation in ops.items():
            yield method.upper(), template, path, operation


LADDER = ['anyone', 'reviewer', 'science', 'admin']


def rights(server):
    lost = server.client('lost')
    server.admin.patch(f'/api/v1/people/{server.ids["lost"]}', {'suspended': True})
    guest, science = server.guest(), server.science
    for method, template, path, operation in operations():
        role = operation['x-role']
        if role == 'anyone':
            continue
        name = f'{method} {template}'
        body = {} if 'requestBody' in operation else None
        answer = server.client().ask(method, path, body)
        check(f'{name} is for nobody unknown: 401', answer.status == 401 and answer.kind == 'not_signed_in', answer)
        answer = server.client().ask(method, path, body, headers={'Authorization': 'Bearer ' + 'A' * 43})
        check(f'{name} takes no token but ours: 401', answer.status == 401, answer)
        answer = lost.ask(method, path, body)
        check(f'{name} is not for the suspended: 403', answer.status == 403 and answer.kind == 'suspended', answer)
        for lower, client in (('reviewer', guest), ('science', science)):
            if LADDER.index(lower) < LADDER.index(role):
                answer = client.ask(method, path, body)
                check(f'{name} is not for a {lower}: 403', answer.status == 403 and answer.kind == 'not_allowed', answer)


def cookies(server):
    """A page of another site can neither send our header nor hide where it is from."""
    for method, template, path, operation in operations():
        if method == 'GET':
            continue
        guest = server.guest()
        guest.ours = False
        body = {} if 'requestBody' in operation else None
        answer = guest.ask(method, path, body)
        role = operation['x-role']
        kinds = ('missing_request_header',) if role in ('anyone', 'reviewer') else ('not_allowed', 'missing_request_header')
        check(f'{method} {template} with a cookie alone: 403', answer.status == 403 and answer.kind in kinds, answer)
        if role == 'anyone':
            answer = server.client().ask(method, path, body, headers={'Sec-Fetch-Site': 'cross-site'})
            check(f'{method} {template} from a page of another site: 403', answer.status == 403, answer)


def bodies(server):
    admin = server.admin
    for method, template, path, operation in operations():
        if method == 'GET':
            continue
        name = f'{method} {template}'
        headers = {'Idempotency-Key': 'k'}
        big = json.dumps({'x': 'y' * 80000}).encode()
        if 'requestBody' not in operation:
            answer = admin.ask(method, path, {'x': 1}, before=True)
            check(f'{name} takes no body: 413', answer.status == 413 and answer.kind == 'too_large', answer)
            continue
        answer = admin.ask(method, path, big, headers=headers)
        check(f'{name} takes no body without end: 413, with the limit',
              answer.status == 413 and 'limit' in answer.json['detail'], answer)
        answer = admin.ask(method, path, b'{"x": ', headers=headers)
        check(f'{name} says where a body is malformed: 400',
              answer.status == 400 and answer.kind == 'malformed_json' and 'line 1' in answer.json['detail'], answer)
        answer = admin.ask(method, path, b'x=1', headers={**headers, 'Content-Type': 'application/x-www-form-urlencoded'})
        check(f'{name} takes no form: 415', answer.status == 415, answer)
        answer = admin.ask(method, path, {'no_such_member': 1}, headers=headers)
        check(f'{name} refuses a member that it does not know, naming it: 422',
              answer.status == 422 and 'no_such_member' in answer.fields, answer)
        if operation['requestBody']['required']:
            answer = admin.ask(method, path, None, headers={**headers, 'Content-Type': 'application/json'})
            check(f'{name} needs a body', answer.status == 400, answer)


def queries(server):
    """A misspelt filter must not pass for none."""
    admin = server.admin
    for method, template, path, operation in operations():
        known = [p['name'] for p in operation.get('parameters', []) if p['in'] == 'query']
        if known:
            wrong = known[0] + 's'
            answer = admin.ask(method, f'{path}?{wrong}=1')
            check(f'{method} {template} refuses the query field {wrong}, naming it',
                  answer.status == 422 and answer.fields == [wrong] or answer.status == 404 and '{' in template, answer)


def check_all(server):
    itself(server)
    rights(server)
    cookies(server)
    bodies(server)
    queries(server)
