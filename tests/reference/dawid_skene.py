#!/usr/bin/python3
"""Plain Dawid & Skene against the published example, open labels, and an EM written here in numpy.

Sources stand beside each check. The numpy EM works on dense arrays of counts (item x person x label),
so it shares neither code nor order of sums with the program.
"""
import csv
import os
import pathlib
import subprocess
import sys

import numpy as np

sys.path.insert(0, str(pathlib.Path(__file__).resolve().parent.parent))
from checks import ROOT, check, finish, shared_data, skip  # noqa: E402

DRIVER = pathlib.Path(os.environ.get('EBBMARK_BUILD', ROOT / 'build/release'),
                      'tests/reference/dawid_skene_driver')


class Fit:
    """What an EM came to: log-likelihood, proportions, class probabilities, rates[person, class, label]."""
    def __init__(self, log_likelihood, proportion, probability, rates, converged=True):
        self.log_likelihood, self.proportion = log_likelihood, proportion
        self.probability, self.rates, self.converged = probability, rates, converged


def fit_program(counts, classes):
    """counts: item x person x label. The program's fit."""
    items, people, kinds = counts.shape
    rows = [f'{i} {j} {k} {counts[i, j, k]}' for i, j, k in zip(*np.nonzero(counts))]
    np.random.default_rng(1).shuffle(rows)
    text = f'{items} {people} {classes} {kinds}\n' + '\n'.join(rows) + '\n'
    done = subprocess.run([DRIVER], input=text, capture_output=True, text=True, timeout=120, check=True)
    lines = [[float(word) for word in line.split()] for line in done.stdout.splitlines()]
    return Fit(lines[0][0], np.array(lines[1]), np.array(lines[2:2 + items]),
               np.array(lines[2 + items:]).reshape(people, classes, kinds), lines[0][2] == 1)


def fit_numpy(counts, classes, rounds=20000, tolerance=1e-13):
    votes = counts.sum(axis=1).astype(float)
    p = votes / votes.sum(axis=1, keepdims=True)
    before = -np.inf
    for _ in range(rounds):
        proportion = p.mean(axis=0)
        rates = np.einsum('ik,ijl->jkl', p, counts)
        sums = rates.sum(axis=2, keepdims=True)
        rates = np.where(sums > 0, rates / np.where(sums > 0, sums, 1), 1 / counts.shape[2])
        logs = np.log(np.maximum(proportion, 1e-300)) + np.einsum(
            'ijl,jkl->ik', counts, np.log(np.maximum(rates, 1e-300)))
        most = logs.max(axis=1, keepdims=True)
        p = np.exp(logs - most)
        total = (most[:, 0] + np.log(p.sum(axis=1))).sum()
        p /= p.sum(axis=1, keepdims=True)
        if abs(total - before) <= tolerance * max(abs(total), 1):
            break
        before = total
    return Fit(total, proportion, p, rates)


def the_same(name, counts, classes):
    """Both fits of the same counts, compared; gives the program's."""
    ours, other = fit_program(counts, classes), fit_numpy(counts, classes)
    check(f'{name}: the program converges', ours.converged)
    check(f'{name}: the log-likelihood is that of the numpy EM to 1e-6',
          abs(ours.log_likelihood - other.log_likelihood) < 1e-6,
          f'{ours.log_likelihood} and {other.log_likelihood}')
    seen = len([j for j in range(counts.shape[1]) if counts[:, j].any()])
    check(f'{name}: the {seen} people\'s rates are those of the numpy EM to 1e-4',
          np.abs(ours.rates - other.rates).max() < 1e-4, np.abs(ours.rates - other.rates).max())
    check(f'{name}: the class probabilities are those of the numpy EM to 1e-4',
          np.abs(ours.probability - other.probability).max() < 1e-4)
    return ours


def read(name):
    path = shared_data('crowd-labels/' + name)
    if path is None:
        return None
    with open(path, newline='') as file:
        return list(csv.DictReader(file))


def published_example():
    """Dawid & Skene 1979, Applied Statistics 28, 20-28: 45 patients, 5 observers, 4 ratings. The
    class proportions are those printed there; the log-likelihood was found by an independent EM."""
    rows = read('dawid-skene-1979.csv')
    if rows is None:
        skip('the example of Dawid & Skene 1979', 'its labels are not at EBBMARK_SHARED_DATA')
        return
    patients = sorted({int(row['patient']) for row in rows})
    observers = sorted({int(row['observer']) for row in rows})
    counts = np.zeros((len(patients), len(observers), 4), dtype=int)
    for row in rows:
        counts[patients.index(int(row['patient'])), observers.index(int(row['observer'])),
               int(row['rating']) - 1] += 1
    ours = the_same('Dawid & Skene 1979', counts, 4)
    check('Dawid & Skene 1979: class proportions are 0.40, 0.42, 0.11, 0.07',
          np.array_equal(np.round(ours.proportion, 2), [0.40, 0.42, 0.11, 0.07]), ours.proportion)
    check('Dawid & Skene 1979: the log-likelihood is -192.8909',
          abs(ours.log_likelihood + 192.8909) < 5e-5, ours.log_likelihood)


def bluebirds():
    """Welinder et al. 2010, NIPS: 108 pictures, 39 people; figures recomputed independently."""
    answers, truths = read('bluebirds-answers.csv'), read('bluebirds-truth.csv')
    if answers is None or truths is None:
        skip('votes and Dawid-Skene on the bluebirds', 'the labels are not at EBBMARK_SHARED_DATA')
        return
    items = [row['item'] for row in truths]
    people = sorted({row['person'] for row in answers})
    counts = np.zeros((len(items), len(people), 2), dtype=int)
    for row in answers:
        counts[items.index(row['item']), people.index(row['person']), int(row['answer'])] += 1
    truth = np.array([int(row['truth']) for row in truths])
    votes = counts.sum(axis=1)
    right = np.mean((votes[:, 1] > votes[:, 0]) == (truth == 1))
    check('bluebirds: votes are right on 75.9 %', round(100 * right, 1) == 75.9, right)
    ours = the_same('bluebirds', counts, 2)
    right = np.mean((ours.probability[:, 1] > 0.5) == (truth == 1))
    check('bluebirds: Dawid-Skene is right on 89.8 %', round(100 * right, 1) == 89.8, right)


def simulated(seed, items, people, classes, looks):
    """Labels drawn from the model itself; needs nothing from outside."""
    random = np.random.default_rng(seed)
    truth = random.choice(classes, items, p=random.dirichlet(np.full(classes, 5.0)))
    rates = np.array([[random.dirichlet(np.where(np.arange(classes) == k, 6.0, 1.0))
                       for k in range(classes)] for _ in range(people)])
    counts = np.zeros((items, people, classes), dtype=int)
    for i in range(items):
        for j in random.choice(people, looks, replace=False):
            for _ in range(random.integers(1, 3)):
                counts[i, j, random.choice(classes, p=rates[j, truth[i]])] += 1
    ours = the_same(f'simulated, seed {seed}', counts, classes)
    right = np.mean(ours.probability.argmax(axis=1) == truth)
    votes = np.mean(counts.sum(axis=1).argmax(axis=1) == truth)
    check(f'simulated, seed {seed}: right more often than votes', right > votes, (right, votes))
    check(f'simulated, seed {seed}: proportions are near those drawn',
          np.abs(ours.proportion - np.bincount(truth, minlength=classes) / items).max() < 0.05,
          ours.proportion)


published_example()
bluebirds()
simulated(1, 400, 12, 2, 5)
simulated(2, 500, 15, 4, 7)
simulated(3, 600, 30, 3, 6)
finish()
