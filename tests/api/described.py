"""Holds answers against openapi.json: status, media type, headers and schema."""
import json

import jsonschema

from checks import ROOT

# What a request may be answered with before it reaches an operation, whatever that is described with.
BEFORE = {400, 404, 405, 413, 414, 415, 417, 431}


class Described:
    def __init__(self):
        self.whole = json.loads((ROOT / 'server/api/openapi.json').read_text())
        self.resolver = jsonschema.RefResolver('', self.whole)
        self.seen = set()       # (method, template, status)
        self.count = 0

    def operation(self, method, path):
        """(template, operation) of a path; the template that spells out more wins. (None, None): no such."""
        method = 'get' if method == 'HEAD' else method.lower()
        parts = path.split('?')[0].split('/')
        fitting = []
        for template, operations in self.whole['paths'].items():
            names = template.split('/')
            if len(names) == len(parts) and method in operations and all(
                    n == p or (n.startswith('{') and p) for n, p in zip(names, parts)):
                fitting.append((sum(not n.startswith('{') for n in names), template))
        if not fitting:
            return None, None
        template = max(fitting)[1]
        return template, self.whole['paths'][template][method]

    def follow(self, thing):
        while isinstance(thing, dict) and '$ref' in thing:
            thing = self.resolver.resolve(thing['$ref'])[1]
        return thing

    def problems_of(self, value, schema):
        validator = jsonschema.Draft202012Validator(
            schema, resolver=self.resolver, format_checker=jsonschema.Draft202012Validator.FORMAT_CHECKER)
        return [f'{"/".join(map(str, e.absolute_path))}: {e.message[:200]}'
                for e in validator.iter_errors(value)]

    def fault(self, method, path, answer, before=False):
        """None when the answer is one that the description promises; else what is wrong with it."""
        self.count += 1
        template, operation = self.operation(method, path)
        problem = self.whole['components']['responses']['Problem']
        if operation is None:
            response = problem if answer.status in BEFORE else None
        else:
            response = operation['responses'].get(str(answer.status))
            if response is not None:
                self.seen.add(('get' if method == 'HEAD' else method.lower(), template, answer.status))
            elif before and answer.status in BEFORE:
                response = problem
        if response is None:
            return f'{method} {path}: {answer.status} is not described: {answer.body[:300]!r}'
        wrong = self.fault_in(self.follow(response), answer, method)
        return None if wrong is None else f'{method} {path} {answer.status}: {wrong}'

    def fault_in(self, response, answer, method):
        content = response.get('content', {})
        for name, header in response.get('headers', {}).items():
            value = answer.headers.get(name)
            if value is not None and header['schema'].get('type') != 'integer':
                wrong = self.problems_of(value, header['schema'])
                if wrong:
                    return f'header {name}: {wrong}'
        if not content:
            return None if answer.body == b'' else f'a body where none is described: {answer.body[:80]!r}'
        media_type = (answer.headers.get('Content-Type') or '').split(';')[0].strip()
        if media_type not in content:
            return f'the media type {media_type} is not described'
        if method == 'HEAD':
            return None if answer.body == b'' else 'a body in answer to HEAD'
        schema = content[media_type]['schema']
        if not media_type.endswith('json'):
            return None if answer.body else 'an empty body'
        try:
            value = json.loads(answer.body)
        except ValueError as error:
            return f'no JSON: {error}'
        wrong = self.problems_of(value, schema)
        if not wrong and media_type == 'application/problem+json' and value['status'] != answer.status:
            wrong = [f'the problem says {value["status"]}']
        return None if not wrong else '; '.join(wrong[:5])

    def unseen(self):
        """Answers that are described and did not come, but those of overload and of faults of ours."""
        return sorted((method, template, int(status))
                      for template, operations in self.whole['paths'].items()
                      for method, operation in operations.items()
                      for status in operation['responses']
                      if int(status) not in (429, 500, 503, 507)
                      and (method, template, int(status)) not in self.seen)
