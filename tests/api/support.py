"""What the API checks share: a server on a fresh database, and clients whose every answer is held against
openapi.json."""
import gzip
import http.client
import json
import os
import pathlib
import random
import re
import shutil
import signal
import subprocess
import sys
import time

sys.path.insert(0, str(pathlib.Path(__file__).resolve().parent.parent))
from checks import PROGRAM, check, finish, skip  # noqa: E402,F401
from described import Described  # noqa: E402

DESCRIBED = Described()
FAULTS = []                     # answers that are not as described
PASSPHRASE = 'four plain words here'
POINTS = 1440                   # of a star: 30 d, one each half hour
DIP = (5.0, 5.25, 0.02)         # starts, ends, depth of the dip on RB-0001


class Answer:
    def __init__(self, response, body):
        self.status = response.status
        self.headers = response.headers
        self.raw = body
        self.body = gzip.decompress(body) if response.headers.get('Content-Encoding') == 'gzip' and body else body

    @property
    def json(self):
        return json.loads(self.body) if self.body else None

    @property
    def kind(self):
        """The kind of problem, or None."""
        if self.headers.get('Content-Type') != 'application/problem+json':
            return None
        return self.json['type'].removeprefix('/problems/')

    @property
    def fields(self):
        return [fault['field'] for fault in (self.json or {}).get('fields', [])]

    def __repr__(self):
        return f'{self.status} {self.body[:300]!r}'


class Client:
    """One person's connection: a session cookie, or a token."""

    def __init__(self, port, token=None, ours=True):
        self.port, self.token, self.cookie, self.ours = port, token, None, ours
        self.connection = None

    def close(self):
        if self.connection is not None:
            self.connection.close()
            self.connection = None

    def send(self, method, path, body=None, headers=None):
        sent = {'Host': f'127.0.0.1:{self.port}'}
        if self.token:
            sent['Authorization'] = f'Bearer {self.token}'
        if self.cookie:
            sent['Cookie'] = f'ebbmark_session={self.cookie}'
        if self.ours and method not in ('GET', 'HEAD'):
            sent['Ebbmark-Request'] = '1'
        if body is not None and not isinstance(body, bytes):
            body = json.dumps(body).encode()
        if body is not None:
            sent['Content-Type'] = 'application/json'
        for name, value in (headers or {}).items():
            if value is None:
                sent.pop(name, None)
            else:
                sent[name] = value
        if self.connection is None:
            self.connection = http.client.HTTPConnection('127.0.0.1', self.port, timeout=60)
        try:
            self.connection.request(method, path, body=body, headers=sent)
            response = self.connection.getresponse()
            answer = Answer(response, response.read())
        except BaseException:
            self.close()
            raise
        if answer.headers.get('Connection') == 'close':
            self.close()
        for cookie in answer.headers.get_all('Set-Cookie') or []:
            value = re.match(r'ebbmark_session=([^;]*)', cookie)
            if value:
                self.cookie = value.group(1) or None
        return answer

    def ask(self, method, path, body=None, headers=None, before=False):
        """Send, and hold the answer against the description."""
        answer = self.send(method, path, body, headers)
        fault = DESCRIBED.fault(method, path, answer, before)
        if fault is not None:
            FAULTS.append(fault)
        return answer

    def get(self, path, **more):
        return self.ask('GET', path, **more)

    def post(self, path, body=None, **more):
        return self.ask('POST', path, body, **more)

    def patch(self, path, body=None, **more):
        return self.ask('PATCH', path, body, **more)

    def delete(self, path, **more):
        return self.ask('DELETE', path, **more)

    # what reviewers do

    def take(self):
        """A lease, or None when nothing is left."""
        answer = self.post('/api/v1/leases')
        assert answer.status in (201, 204), answer
        return answer.json if answer.status == 201 else None

    def review(self, lease, marks=(), key=None, **more):
        text = lease if isinstance(lease, str) else lease['lease']
        return self.post('/api/v1/reviews', {'lease': text, 'marks': list(marks), **more},
                         headers={'Idempotency-Key': key or f'key-{random.getrandbits(64):x}'})


def program(*arguments, **more):
    return subprocess.run([PROGRAM, *map(str, arguments)], capture_output=True, text=True, **more)


def run_program(*arguments, **more):
    result = program(*arguments, **more)
    assert result.returncode in (0, 3), f'{arguments}: {result.returncode} {result.stderr}'
    return result.stdout


def write_stars(folder):
    """Six stars, one with a dip, one with an awkward name; one file that must be refused."""
    folder.mkdir()
    for number in range(1, 7):
        noise = random.Random(number)
        name = 'RB 0006/β+' if number == 6 else f'RB-{number:04}'
        rows = []
        for i in range(POINTS):
            time_d = i / 48
            flux = 1 + noise.gauss(0, 0.001)
            if number == 1 and DIP[0] <= time_d <= DIP[1]:
                flux -= DIP[2]
            rows.append(f'{time_d:.6f},{1000 * flux:.4f},1.0,{name}')
        (folder / f'star-{number}.csv').write_text(
            'time [BJD-2460000],flux,error,star\n' + '\n'.join(rows) + '\n')
    (folder / 'broken.csv').write_text('time,flux\n1,2\n')
    (folder.parent / 'catalogue.csv').write_text(
        'star,ra [deg],dec [deg],magnitude,temperature [K],radius [solRad],mass [solMass]\n'
        'RB-0001,209.25,-56.5,13.5,4500,0.7,0.65\n')


class Template:
    """A loaded database with an admin (keeper), a scientist (dora) and a suspended one (lost), made once."""

    def __init__(self, place):
        self.path = place / 'template.db'
        write_stars(place / 'stars')
        run_program('load', '--database', self.path, '--batch', 'Reedbed', '--stars', place / 'catalogue.csv',
                    place / 'stars')
        self.tokens, self.ids = {}, {}
        for handle, role in (('keeper', 'admin'), ('dora', 'science'), ('lost', 'admin')):
            said = run_program('person', '--database', self.path, '--add', handle, '--role', role,
                               input=PASSPHRASE + '\n')
            self.ids[handle] = int(re.match(r'Person (\d+):', said).group(1))
            self.tokens[handle] = run_program('person', '--database', self.path, '--token', handle).strip()


def marks_of(client, lease, number):
    """What somebody who sees the dip marks on their segment: it, or nothing."""
    flux = client.get(lease['segment']['flux'], headers={'Accept': 'application/json'}).json
    low, shift = min(flux['flux']), 0.01 * (number % 3)
    if low >= 1 - DIP[2] / 2:
        return []
    return [{'starts': DIP[0] - shift, 'ends': DIP[1] + shift, 'low': low, 'high': 1.001}]


class Server:
    """`ebbmark serve` on a copy of the template, on a free loopback port."""

    def __init__(self, template, folder, copy=True):
        folder.mkdir(exist_ok=True)
        self.folder, self.tokens, self.ids = folder, template.tokens, template.ids
        self.database = folder / 'campaign.db'
        if copy:
            shutil.copy(template.path, self.database)
        self.process = None
        self.start()

    def start(self):
        self.log = open(self.folder / 'server.log', 'ab')
        self.process = subprocess.Popen([PROGRAM, 'serve', '--database', self.database, '--listen', '127.0.0.1:0'],
                                        stdout=subprocess.PIPE, stderr=self.log, text=True)
        line = self.process.stdout.readline()
        found = re.search(r'http://127\.0\.0\.1:(\d+)/', line)
        if not found:
            self.process.wait(timeout=30)
            raise RuntimeError(f'the server did not start: {(self.folder / "server.log").read_text()[-2000:]}')
        self.port = int(found.group(1))

    def stop(self):
        """Ask it to stop; its exit status."""
        if self.process is None:
            return 0
        self.process.send_signal(signal.SIGTERM)
        self.process.stdout.close()
        status = self.process.wait(timeout=60)
        self.process = None
        self.log.close()
        return status

    def kill(self):
        self.process.kill()
        self.process.wait()
        self.process.stdout.close()
        self.process = None
        self.log.close()

    def said(self):
        return (self.folder / 'server.log').read_text(errors='replace')

    def client(self, who=None):
        """A client with a person's token; without, nobody yet."""
        return Client(self.port, token=self.tokens[who] if who else None)

    def guest(self):
        client = self.client()
        answer = client.post('/api/v1/people', {})
        assert answer.status == 201, answer
        client.person = answer.json['person']
        client.handle = answer.json['handle']
        return client

    @property
    def admin(self):
        return self.client('keeper')

    @property
    def science(self):
        return self.client('dora')

    def review_everything(self, people=6):
        """Guests look at every segment, and mark the dip where they see it. The clients."""
        clients = []
        for number in range(people):
            client = self.guest()
            clients.append(client)
            while (lease := client.take()) is not None:
                answer = client.review(lease, marks_of(client, lease, number), seconds=5)
                assert answer.status == 201, answer
        return clients

    def run_consensus(self):
        """Run one and wait for it; the newest run."""
        science = self.science
        answer = science.post('/api/v1/consensus-runs')
        assert answer.status in (202, 409), answer
        for _ in range(600):
            state = science.get('/api/v1/consensus-runs/current').json
            if state['state'] == 'idle':
                assert state['last_error'] is None, state
                return state['newest']
            time.sleep(0.05)
        raise RuntimeError('the consensus run does not end')


def is_root():
    return os.geteuid() == 0
