#!/usr/bin/python3
"""The transit model against direct numerical integration, closed forms and published values.

Sources stand beside each check. The integration is our own definition of the problem, in scipy: the
star's brightness over the part of it that lies behind the disc, ring by ring.
"""
import math
import pathlib
import subprocess
import sys
import os

import numpy as np
from scipy.integrate import quad

sys.path.insert(0, str(pathlib.Path(__file__).resolve().parent.parent))
from checks import ROOT, check, finish  # noqa: E402

DRIVER = pathlib.Path(os.environ.get('EBBMARK_BUILD', ROOT / 'build/release'),
                      'tests/reference/transit_driver')


def ask(lines):
    """The driver's answers, one list of numbers a line."""
    done = subprocess.run([DRIVER], input='\n'.join(lines) + '\n', capture_output=True, text=True,
                          timeout=120, check=True)
    return [[float(word) for word in line.split()] for line in done.stdout.splitlines()]


def fluxes(points):
    return np.array([row[0] for row in ask('flux %.17g %.17g %.17g %.17g' % p for p in points)])


def integrated(z, k, u1, u2):
    """Flux by integration over rings of the star; each ring is hidden over an arc. With
    r = low + (high - low) (1 - cos t) / 2 the integrand has no singular end left."""
    def brightness(r):
        mu = math.sqrt(max(1 - r * r, 0.0))
        return 1 - u1 * (1 - mu) - u2 * (1 - mu) ** 2

    def ring(r):
        if z == 0:
            arc = math.pi if r < k else 0.0
        else:
            cosine = ((r - k) * (r + k) + z * z) / (2 * r * z)
            arc = math.acos(min(max(cosine, -1.0), 1.0))
        return 2 * arc * r * brightness(r)

    def over(function, low, high):
        if high <= low:
            return 0.0
        half = (high - low) / 2
        return quad(lambda t: function(low + half * (1 - math.cos(t))) * half * math.sin(t),
                    0, math.pi, epsabs=1e-11, epsrel=1e-11, limit=400)[0]

    hidden = over(lambda r: 2 * math.pi * r * brightness(r), 0.0, min(max(k - z, 0.0), 1.0))
    hidden += over(ring, min(abs(z - k), 1.0), min(z + k, 1.0))
    return 1 - hidden / (math.pi * (1 - u1 / 3 - u2 / 6))


def grid_is_right():
    ratios = [0.001, 0.00917, 0.05, 0.1, 0.2, 0.3, 0.49999, 0.5, 0.50001, 0.7, 0.9, 1.0, 1.1, 1.7, 5.0]
    laws = [(0.0, 0.0), (0.4, 0.26), (1.0, 0.0), (0.0, 1.0), (0.6, -0.2)]
    points = []
    for k in ratios:
        places = set(np.linspace(0, 1 + k, 23)) | {k, 0.5 * k}
        for contact in (abs(1 - k), 1 + k, k):
            for step in (0.0, 1e-15, 1e-12, 1e-9, 1e-7, 1e-5, 1e-3):
                places |= {contact - step, contact + step}
        for z in sorted(p for p in places if p >= 0):
            points += [(z, k, *law) for law in laws]
    got = fluxes(points)
    wanted = np.array([integrated(*p) for p in points])
    worst = int(np.argmax(np.abs(got - wanted)))
    error = abs(got[worst] - wanted[worst])
    check(f'the quadratic law agrees with direct integration to 1e-8 at {len(points)} places, '
          'contacts, z = k, k = 1/2 and k > 1 among them', error < 1e-8,
          f'{error:.2g} at z, k, u1, u2 = {points[worst]}')
    check('the grid reaches from nothing hidden to everything hidden',
          abs(got.min()) < 1e-12 and abs(got.max() - 1) < 1e-12, f'{got.min()} to {got.max()}')


def uniform_disc_is_right():
    """Two circles' common area in closed form (elementary geometry)."""
    rng = np.random.default_rng(11)
    k, share = rng.uniform(0.01, 2.0, 400), rng.uniform(0, 1, 400)
    z = np.abs(1 - k) + share * (1 + k - np.abs(1 - k))
    first = k**2 * np.arccos((z**2 + k**2 - 1) / (2 * z * k))
    second = np.arccos((z**2 + 1 - k**2) / (2 * z))
    kite = 0.5 * np.sqrt((-z + k + 1) * (z + k - 1) * (z - k + 1) * (z + k + 1))
    wanted = 1 - (first + second - kite) / np.pi
    error = np.abs(fluxes([(*p, 0, 0) for p in zip(z, k)]) - wanted).max()
    check('without limb darkening it is the common area of two circles', error < 1e-12, error)


def published_depths():
    """IAU 2015 Resolution B3 nominal radii: Sun 6.957e8 m; Earth, Jupiter equatorial 6.3781e6 and
    7.1492e7 m. The depths 84 ppm and 1.06 % are what these give, as commonly quoted."""
    for name, radius, wanted, slack in (('Earth', 6.3781e6, 84e-6, 0.5e-6),
                                        ('Jupiter', 7.1492e7, 0.0106, 0.00005)):
        depth = 1 - fluxes([(0.0, radius / 6.957e8, 0.0, 0.0)])[0]
        check(f'{name} in front of the Sun takes {wanted * 1e6:.0f} ppm', abs(depth - wanted) < slack,
              depth)


def published_durations():
    """Winn 2010, Transits and Occultations: 13 h x (P / yr)^(1/3) x (density / solar)^(-1/3) is the
    characteristic time (equation 19); an Earth analogue takes 13.1 h from first to fourth contact
    with a = 1 au (IAU 2012 B2) and the nominal solar radius."""
    axis = 1.495978707e11 / 6.957e8
    k = 6.3781e6 / 6.957e8
    total, full = ask([f'orbit 365.25 0 {k} {axis} 0 0 0 0'])[0]
    check('an Earth analogue crosses centrally in 13.1 h', abs(total * 24 - 13.1) < 0.05, total * 24)
    ours = ask(['axis 365.25636 1'])[0][0]
    check("a / R* from the year and the Sun's density is 1 au in solar radii", abs(ours / axis - 1) < 1e-4,
          f'{ours} and {axis}')
    rng = np.random.default_rng(5)
    worst = 0.0
    for _ in range(200):
        p, k, a, b = rng.uniform(0.5, 400), rng.uniform(0, 0.3), rng.uniform(3, 200), rng.uniform(0, 0.65)
        inclination = math.acos(b / a)
        # Winn 2010, equations 14 and 15, for a circular orbit.
        t14 = p / math.pi * math.asin(math.sqrt((1 + k) ** 2 - b * b) / a / math.sin(inclination))
        t23 = p / math.pi * math.asin(math.sqrt((1 - k) ** 2 - b * b) / a / math.sin(inclination))
        total, full = ask([f'orbit {p!r} 3 {k!r} {a!r} {b!r} 0.3 0.2 0'])[0]
        worst = max(worst, abs(total / t14 - 1), abs(full / t23 - 1))
    check('T14 and T23 are those of Winn (2010), equations 14 and 15', worst < 1e-12, worst)
    # Common practice, no source: a close-in giant takes about three hours.
    axis = ask(['axis 3.5 1'])[0][0]
    total, _ = ask([f'orbit 3.5 0 0.1 {axis} 0.2 0 0 0'])[0]
    check('a close-in giant crosses its star in about three hours', 2.5 < total * 24 < 3.5, total * 24)


def orbit_and_exposure():
    """The curve against the same orbit in numpy, and its average over the exposure against a
    trapezoid sum of 20,001 instants."""
    rng = np.random.default_rng(17)
    worst_at = worst_averaged = 0.0
    for _ in range(24):
        p, k, a = rng.uniform(0.6, 30), 10 ** rng.uniform(-2, -0.5), rng.uniform(3, 40)
        b, mid = rng.uniform(0, 1.0) * (1 + k), rng.uniform(-50, 50)
        law = (rng.uniform(0, 0.7), rng.uniform(0, 0.3))
        exposure = 10 ** rng.uniform(-3.5, -0.7)
        total, full = ask([f'orbit {p!r} {mid!r} {k!r} {a!r} {b!r} {law[0]!r} {law[1]!r} 0'])[0]
        if total == 0:
            continue
        half = total / 2 + exposure
        since = np.concatenate([np.linspace(-half, half, 41), [-total / 2, full / 2, 0.3 * p]])
        times = mid + rng.integers(-3, 4) * p + since
        head = f'orbit {p!r} {mid!r} {k!r} {a!r} {b!r} {law[0]!r} {law[1]!r} '

        def instant(t):
            phase = 2 * np.pi * (t - mid) / p
            z = np.sqrt((a * np.sin(phase)) ** 2 + (b * np.cos(phase)) ** 2)
            z[np.cos(phase) < 0] = 10.0
            return fluxes([(float(v), k, *law) for v in z])

        got = np.array([r[0] for r in ask([head + '0'] + [f'at {t!r}' for t in times.tolist()])[1:]])
        worst_at = max(worst_at, np.abs(got - instant(times)).max())
        got = np.array([r[0] for r in ask([head + repr(exposure)]
                                          + [f'at {t!r}' for t in times.tolist()])[1:]])
        for i in range(0, len(times), 7):
            fine = times[i] + np.linspace(-0.5, 0.5, 20001) * exposure
            wanted = np.trapz(instant(fine), dx=1 / 20000)
            worst_averaged = max(worst_averaged, abs(got[i] - wanted))
    check('the curve is that of a circular orbit, and whole behind the star', worst_at < 1e-9, worst_at)
    check('the average over the exposure agrees with 20,001 instants to 1e-7', worst_averaged < 1e-7,
          worst_averaged)


grid_is_right()
uniform_disc_is_right()
published_depths()
published_durations()
orbit_and_exposure()
finish()
