"""/segments/{id}/flux: packed and as JSON, kept and unchanging."""
import struct

from support import check

PACKED = 'application/vnd.ebbmark.flux'


def unpack(body):
    """The packed form as api.md states it."""
    magic, n, reference, median, noise, zero = struct.unpack_from('<4sIddfI', body)
    assert magic == b'EBF1' and zero == 0 and len(body) == 32 + 8 * n
    days = struct.unpack_from(f'<{n}f', body, 32)
    flux = struct.unpack_from(f'<{n}f', body, 32 + 4 * n)
    return {'times': [reference + d for d in days], 'flux': [1 + f for f in flux], 'noise': noise, 'median': median}


def forms(guest, segment):
    path = segment['flux']
    first = guest.get(path)
    check('flux comes packed unless asked otherwise', first.status == 200 and first.headers['Content-Type'] == PACKED)
    packed = unpack(first.body)
    check('the packed form holds the points that the lease says', len(packed['times']) == segment['points'])
    check('within the segment', abs(packed['times'][0] - segment['starts']) < 0.1
          and abs(packed['times'][-1] - segment['ends']) < 0.1)
    check('about 1, with the noise that was put in', abs(sum(packed['flux']) / len(packed['flux']) - 1) < 0.002
          and 0.0007 < packed['noise'] < 0.0014 and 990 < packed['median'] < 1010, packed['noise'])
    as_json = guest.get(path, headers={'Accept': 'application/json'}).json
    check('the JSON form holds the same', as_json['starts'] == segment['starts']
          and as_json['time_reference'] == segment['time_reference']
          and max(abs(a - b) for a, b in zip(as_json['times'], packed['times'])) < 3e-6
          and max(abs(a - b) for a, b in zip(as_json['flux'], packed['flux'])) < 1e-6
          and len(as_json['times']) == len(packed['times']), str(as_json)[:200])
    removed = unpack(guest.get(path + '?view=trend_removed').body)
    check('without its trend a segment is another', removed['flux'] != packed['flux']
          and max(abs(a - b) for a, b in zip(removed['flux'], packed['flux'])) < 0.01)
    check('as measured is the default', guest.get(path + '?view=as_measured').body == first.body)
    answer = guest.get(path + '?view=smooth')
    check('another view is refused, naming it', answer.status == 422 and answer.fields == ['view'], answer)
    answer = guest.get(path, headers={'Accept': 'image/png'})
    check('another media type: 406', answer.status == 406 and answer.kind == 'not_acceptable', answer)
    answer = guest.get(path, headers={'Accept': f'{PACKED};q=0.1, application/json;q=0.9'})
    check('of two forms the preferred one is given', answer.headers['Content-Type'] == 'application/json')


def keeping(guest, segment):
    path = segment['flux']
    for accept in (PACKED, 'application/json'):
        plain = guest.get(path, headers={'Accept': accept})
        check(f'{accept} may be kept a day by its holder alone',
              plain.headers['Cache-Control'] == 'private, max-age=86400, immutable'
              and 'Accept' in plain.headers['Vary'], plain.headers.items())
        tag = plain.headers['ETag']
        again = guest.get(path, headers={'Accept': accept, 'If-None-Match': tag})
        check(f'{accept} that is there already is not sent again', again.status == 304
              and again.headers['ETag'] == tag, again)
        small = guest.get(path, headers={'Accept': accept, 'Accept-Encoding': 'gzip'})
        check(f'{accept} comes compressed when accepted', small.headers.get('Content-Encoding') == 'gzip'
              and small.body == plain.body and len(small.raw) < len(plain.raw)
              and small.headers['ETag'] != tag, small.headers.items())
        again = guest.get(path, headers={'Accept': accept, 'Accept-Encoding': 'gzip',
                                         'If-None-Match': small.headers['ETag']})
        check(f'{accept} compressed has a tag of its own', again.status == 304, again)
    head = guest.ask('HEAD', path)
    check('HEAD gives the head alone', head.status == 200 and head.body == b''
          and int(head.headers['Content-Length']) == 32 + 8 * segment['points'], head.headers.items())


def rights(server, guest, segment, lease):
    other = server.guest()
    answer = other.get(segment['flux'])
    check('without a lease on it nobody sees a segment: 403',
          answer.status == 403 and answer.kind == 'not_allowed', answer)
    answer = other.get(segment['flux'], headers={'Ebbmark-Lease': lease['lease']})
    check('somebody else\'s lease is no help', answer.status == 403, answer)
    answer = other.get(segment['flux'], headers={'If-None-Match': guest.get(segment['flux']).headers['ETag']})
    check('nor is knowing its tag', answer.status == 403, answer)
    check('the science team sees every segment', server.science.get(segment['flux']).status == 200)
    check('nobody sees nothing: 401', server.client().get(segment['flux']).status == 401)
    for wrong in ('0' * 16, 'x' * 16, segment['id'][:15], segment['id'] + '0', segment['id'].upper() + '/..',
                  '%00', 'a' * 300):
        status = server.science.get(f'/api/v1/segments/{wrong}/flux', before=True).status
        check(f'there is no segment {wrong[:20]}', status in (400, 404), status)
    if segment['id'] != segment['id'].upper():
        check('an id in capitals is another', server.science.get(
            f'/api/v1/segments/{segment["id"].upper()}/flux').status == 404)
    guest.review(lease)
    check('whoever has reviewed a segment may look at it again', guest.get(segment['flux']).status == 200)


def restart(server, guest):
    """Leases are kept in memory, but each proves itself."""
    lease = guest.take()
    path = lease['segment']['flux']
    before = guest.get(path)
    check('the server stops cleanly', server.stop() == 0)
    server.start()
    guest.port = server.port
    guest.close()
    check('after a restart a lease that is not sent along is forgotten', guest.get(path).status == 403)
    after = guest.get(path, headers={'Ebbmark-Lease': lease['lease']})
    check('but a lease that is sent along is proof enough',
          after.status == 200 and after.headers['ETag'] == before.headers['ETag'], after)
    check('and a review with it is taken', guest.review(lease).status == 201)


def check_all(server):
    guest = server.guest()
    lease = guest.take()
    forms(guest, lease['segment'])
    keeping(guest, lease['segment'])
    rights(server, guest, lease['segment'], lease)
    restart(server, guest)
