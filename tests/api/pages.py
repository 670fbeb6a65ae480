"""The pages and what they are made of."""
from support import check


def check_all(server):
    client = server.client()
    for path in ('/', '/desk'):
        answer = client.send('GET', path)
        check(f'{path} is a page', answer.status == 200 and answer.headers['Content-Type'] == 'text/html; charset=utf-8'
              and b'<html' in answer.body, answer)
        policy = answer.headers.get('Content-Security-Policy', '')
        check(f'{path} runs nothing but its own', "default-src 'self'" in policy and 'unsafe' not in policy, policy)
        again = client.send('GET', path, headers={'If-None-Match': answer.headers['ETag']})
        check(f'{path} is not sent again to whoever has it', again.status == 304)
        small = client.send('GET', path, headers={'Accept-Encoding': 'gzip'})
        check(f'{path} comes compressed when accepted', small.headers.get('Content-Encoding') == 'gzip'
              and small.body == answer.body)
    answer = client.send('GET', '/desk.js')
    check('a module has a type that browsers run', answer.headers['Content-Type'].startswith('text/javascript'))
    for path in ('/package.json', '/desk.js/', '/../Makefile', '/%2e%2e/Makefile', '/.git/config', '//desk.js', '/desk%2Ejs%00'):
        status = client.send('GET', path).status
        check(f'{path} is nothing', status in (400, 404) or (path == '/desk.js/' and status == 200), status)
    answer = client.send('POST', '/desk', b'')
    check('pages take no posts', answer.status == 405 and answer.headers['Allow'] == 'GET, HEAD', answer)
