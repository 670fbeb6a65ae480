"""Too many requests, and too many segments held."""
from support import check


def check_all(server):
    guest = server.guest()
    answers = [guest.get('/api/v1/me') for _ in range(2500)]
    refused = [answer for answer in answers if answer.status == 429]
    check('whoever asks without pause is told to wait: 429 with Retry-After', refused
          and refused[0].kind == 'too_many_requests' and int(refused[0].headers['Retry-After']) >= 1, len(refused))
    check('but only after a thousand at once', [a.status for a in answers[:1000]] == [200] * 1000)
    check('others are not held up by it', server.guest().get('/api/v1/me').status == 200)
