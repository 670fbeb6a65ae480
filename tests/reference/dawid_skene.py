#!/usr/bin/python3
"""Plain Dawid & Skene against the published example and open data, and against an independent EM in numpy.

Sources: Dawid & Skene 1979, Applied Statistics 28, 20-28 (ratings of Table 1; class proportions 0.40, 0.42,
0.11, 0.07); log-likelihood at the optimum -192.8909 from an independent numpy EM; Welinder et al. 2010, NIPS
(bluebirds: votes right 75.9 %, Dawid & Skene 89.8 %, recomputed independently)."""
import csv
import json
import os
import pathlib
import subprocess
import sys

import numpy as np

sys.path.insert(0, str(pathlib.Path(__file__).resolve().parent.parent))
from checks import ROOT, check, finish, shared_data, skip  # noqa: E402

DRIVER = pathlib.Path(os.environ.get('EBBMARK_BUILD', ROOT / 'build/release')) / 'tests/reference/dawid_skene_driver'


def ours(rows, items, people, classes):
    text = f'{items} {people} {classes}\n' + '\n'.join(' '.join(map(str, row)) for row in rows)
    return json.loads(subprocess.run([DRIVER], input=text, check=True, capture_output=True, text=True).stdout)


def numpy_em(rows, items, people, classes, rounds=20000):
    """Dawid & Skene's EM from vote fractions, written without a look at ours."""
    counts = np.zeros((items, people, classes))
    for item, person, label in rows:
        counts[item, person, label] += 1
    votes = counts.sum(1)
    t = votes / votes.sum(1, keepdims=True)
    before = -np.inf
    for _ in range(rounds):
        p = t.mean(0)
        pi = np.einsum('ik,ijl->jkl', t, counts)
        with np.errstate(invalid='ignore', divide='ignore'):
            pi = np.where(pi.sum(2, keepdims=True) > 0, pi / pi.sum(2, keepdims=True), 1 / classes)
            log_pi = np.where(pi > 0, np.log(np.maximum(pi, 1e-300)), -690.0)
            logs = np.log(np.maximum(p, 1e-300)) + np.einsum('ijl,jkl->ik', counts, log_pi)
        most = logs.max(1, keepdims=True)
        t = np.exp(logs - most)
        total = float((most[:, 0] + np.log(t.sum(1))).sum())
        t /= t.sum(1, keepdims=True)
        if abs(total - before) < 1e-13 * abs(total):
            break
        before = total
    return t, p, pi, total


def agree(name, rows, items, people, classes):
    fit = ours(rows, items, people, classes)
    t, p, pi, total = numpy_em(rows, items, people, classes)
    check(f'{name}: the optimum of an independent EM', abs(fit['log_likelihood'] - total) < 1e-4,
          f'{fit["log_likelihood"]} {total}')
    check(f'{name}: its class proportions', np.allclose(fit['proportion'], p, atol=1e-4))
    check(f'{name}: its class probabilities',
          np.allclose(np.reshape(fit['class_probability'], t.shape), t, atol=1e-3))
    seen = np.einsum('ik->k', t) > 1e-6
    mine = np.reshape(fit['confusion'], pi.shape)
    check(f'{name}: its error rates to two decimals', np.allclose(mine[:, seen], pi[:, seen], atol=0.005))
    return fit


def published():
    path = shared_data('crowd-labels/dawid-skene-1979.csv')
    if path is None:
        skip('the published example of 1979', 'the open data are not here')
        return
    with open(path) as file:
        rows = [(int(r['patient']) - 1, int(r['observer']) - 1, int(r['rating']) - 1) for r in csv.DictReader(file)]
    fit = agree('the example of 1979', rows, 45, 5, 4)
    check('the example of 1979: class proportions as printed',
          np.allclose(fit['proportion'], [0.40, 0.42, 0.11, 0.07], atol=0.006), fit['proportion'])
    check('the example of 1979: log-likelihood -192.8909', abs(fit['log_likelihood'] + 192.8909) < 1e-3,
          fit['log_likelihood'])


def bluebirds():
    answers, truth = shared_data('crowd-labels/bluebirds-answers.csv'), shared_data('crowd-labels/bluebirds-truth.csv')
    if answers is None or truth is None:
        skip('the bluebird answers', 'the open data are not here')
        return
    with open(truth) as file:
        known = {r['item']: int(r['truth']) for r in csv.DictReader(file)}
    with open(answers) as file:
        read = list(csv.DictReader(file))
    items = {name: i for i, name in enumerate(sorted(known))}
    people = {name: i for i, name in enumerate(sorted({r['person'] for r in read}))}
    rows = [(items[r['item']], people[r['person']], int(r['answer'])) for r in read]
    right = np.array([known[name] for name in sorted(known)])
    votes = np.zeros((len(items), 2))
    for item, _, label in rows:
        votes[item, label] += 1
    by_votes = (votes.argmax(1) == right).mean()
    fit = ours(rows, len(items), len(people), 2)
    by_fit = (np.reshape(fit['class_probability'], (-1, 2)).argmax(1) == right).mean()
    check('bluebirds: votes are right 75.9 % of the time', abs(by_votes - 0.759) < 0.0006, by_votes)
    check('bluebirds: Dawid & Skene is right 89.8 % of the time', abs(by_fit - 0.898) < 0.0006, by_fit)


def simulated():
    """The form that needs nothing from outside: 3 classes, 20 reviewers, error rates drawn here."""
    draw = np.random.default_rng(1979)
    truth = draw.choice(3, 400, p=[0.5, 0.3, 0.2])
    rates = np.array([draw.dirichlet(np.ones(3) + 6 * np.eye(3)[k], 20) for k in range(3)])
    rows = [(i, j, int(draw.choice(3, p=rates[truth[i], j]))) for i in range(400) for j in range(20)
            if draw.random() < 0.4]
    fit = agree('a simulated crowd', rows, 400, 20, 3)
    found = np.reshape(fit['class_probability'], (-1, 3)).argmax(1)
    check('a simulated crowd: more than 95 % of the classes found', (found == truth).mean() > 0.95,
          (found == truth).mean())


def main():
    published()
    bluebirds()
    simulated()
    finish()


if __name__ == '__main__':
    main()
