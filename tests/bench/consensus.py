#!/usr/bin/python3
"""The consensus against a vectorised numpy version of the same model: same optimum, and how much faster.

Both fit one simulated campaign with the population held, so that both climb one function: the penalised
log-likelihood. The numpy version is written from the formulas, over flat arrays with one column a node.
"""
import os
import pathlib
import subprocess
import sys
import tempfile
import time

import numpy as np
from numpy.polynomial.hermite_e import hermegauss
from scipy.special import gammaln

sys.path.insert(0, str(pathlib.Path(__file__).resolve().parent.parent))
from checks import ROOT, check, finish  # noqa: E402

PROGRAM = pathlib.Path(os.environ.get('EBBMARK_BUILD', ROOT / 'build/release'), 'tests/bench/consensus')
REVIEWS = int(sys.argv[1]) if len(sys.argv) > 1 else 20000
U, W = hermegauss(7)
W = W / W.sum()
KNOTS, FIRST, STEP = 19, -2.4, 0.3
SEEN_LEAST, ONE_MORE = 0.05, 0.3
BETA, GAMMA, TAU, KAPPA = (2.0, 2.0), (0.0, 0.5), (0.5, 0.5), (0.25, 4.0)  # (mean, sd or weight)


class Campaign:
    """The columns that the program wrote."""
    def __init__(self, path):
        with open(path) as file:
            head = file.readline().split()
            self.items, looks, self.people = (int(word) for word in head[:3])
            self.days_total, self.log_likelihood, self.rounds = (float(word) for word in head[3:])
            (self.beta, self.gamma, self.tau_dip, self.tau_lure, self.kappa, self.dips, self.lures,
             self.chance, self.together, self.hit_mean, self.hit_sd, self.lure_mean,
             self.lure_sd) = (float(word) for word in file.readline().split())
            shares = np.array([[float(word) for word in file.readline().split()] for _ in range(3)])
            person = np.loadtxt(file, max_rows=self.people)
            item = np.loadtxt(file, max_rows=self.items)
            look = np.loadtxt(file, max_rows=looks)
        self.sure_rate, self.x_share = shares[:, 0], shares[:, 1:]
        self.days, self.theirs = person[:, 0], person[:, 1:]
        self.n, self.snr, self.duration = item[:, 0].astype(int), item[:, 1], item[:, 2]
        self.known, self.control, self.probability = item[:, 3], item[:, 4], item[:, 5]
        self.person, self.marked = look[:, 0].astype(int), look[:, 1]
        self.sure, self.centre = look[:, 2], look[:, 3]
        self.start = np.concatenate([[0], np.cumsum(self.n)[:-1]])
        self.group = np.repeat(np.arange(self.items), self.n)
        self.x = np.log(np.clip(self.snr, 1, 1e6) / 10)
        self.complete = (self.control == 1) & (self.known == 1)
        self.k = self.by_group(self.marked)
        self.sures = self.by_group(self.sure * self.marked)
        mean = self.by_group(self.centre * self.marked) / np.maximum(self.k, 1)
        self.spread = self.by_group(self.marked * (self.centre - mean[self.group]) ** 2) / self.duration ** 2
        self.log_time = np.where(self.k > 0, -0.5 * (self.k - 1) * np.log(2 * np.pi * self.duration ** 2)
                                 - 0.5 * np.log(np.maximum(self.k, 1)), 0)

    def by_group(self, values):
        return np.add.reduceat(values, self.start, axis=0)

    def by_person(self, values):
        return np.bincount(self.person, values, self.people)

    def log_density(self, c):
        at = np.clip((self.x - FIRST) / STEP, 0, KNOTS - 1.000001)
        knot = at.astype(int)
        past = at - knot
        return np.log(((1 - past) * self.x_share[c][knot] + past * self.x_share[c][knot + 1]) / STEP)


class Side:
    """Dips or lures in one round: the integral over u and the derivatives."""
    def __init__(self, data, logit, growth, tau):
        logit = np.clip(logit[data.person] + (growth * data.x)[data.group], -30, 30)
        self.rate = 1 / (1 + np.exp(-(logit[:, None] + tau * U)))
        off = np.log1p(-self.rate)
        on = np.log(self.rate)
        seen = data.by_group(np.where(data.marked[:, None] == 1, on, off)) + np.log(W)
        none = data.by_group(off) + np.log(W)
        self.log, self.share = self.weigh(seen)
        log_unseen, self.unseen_share = self.weigh(none)
        self.unseen = np.minimum(np.exp(log_unseen), 1)

    @staticmethod
    def weigh(logs):
        most = logs.max(axis=1, keepdims=True)
        share = np.exp(logs - most)
        whole = share.sum(axis=1, keepdims=True)
        return most[:, 0] + np.log(whole[:, 0]), share / whole

    def derive(self, data, p):
        like = np.where(data.complete | (self.unseen > 1 - SEEN_LEAST), 0,
                        p * self.unseen / np.maximum(1 - self.unseen, 1e-300))
        real = p[:, None] * self.share
        weight = real + like[:, None] * self.unseen_share
        each = weight[data.group]
        expected = (each * self.rate).sum(axis=1)
        self.slope = p[data.group] * data.marked - expected
        self.curve = expected - (each * self.rate ** 2).sum(axis=1)
        rates = data.by_group(self.rate)
        bent = data.by_group(self.rate * (1 - self.rate))
        self.tau = (U * (real * data.k[:, None] - weight * rates)).sum()
        self.tau_curve = (U ** 2 * weight * bent).sum()


class Fit:
    def __init__(self, data):
        self.data = data
        self.a = np.full(data.people, data.hit_mean)
        self.b = np.full(data.people, data.lure_mean)
        self.log_chance = np.full(data.people, np.log(data.chance))
        self.log_weight = np.zeros(data.people)
        self.beta, self.gamma, self.tau_dip, self.tau_lure, self.kappa = 2.0, 0.3, 0.7, 0.7, 0.25

    def judge(self):
        """E-step; the penalised log-likelihood."""
        d = self.data
        self.dip = Side(d, self.a, self.beta, self.tau_dip)
        self.lure = Side(d, self.b, self.gamma, self.tau_lure)
        agreed = np.where(d.k > 0, d.log_time - (d.k - 1) * np.log(self.kappa)
                          - 0.5 * d.spread / self.kappa ** 2, 0)
        alone = d.by_group(d.marked * self.log_chance[d.person])
        self.company = d.by_group(np.exp(self.log_weight)[d.person])
        together = np.where(d.k >= 2, np.log(d.together) + np.log(1 - ONE_MORE) + (d.k - 2) * np.log(ONE_MORE)
                            + gammaln(d.k + 1) + d.by_group(d.marked * self.log_weight[d.person])
                            - d.k * np.log(self.company) + agreed, -np.inf)
        nothing = np.logaddexp(alone, together)
        self.share_together = np.exp(together - nothing)
        logs = np.array([np.log(d.dips) + self.dip.log + agreed, np.log(d.lures) + self.lure.log + agreed,
                         nothing])
        for c in range(3):
            logs[c] += d.sures * np.log(d.sure_rate[c]) + (d.k - d.sures) * np.log1p(-d.sure_rate[c])
            logs[c] += np.where(d.complete & (c == 0), -np.log(d.dips), d.log_density(c))
        for c, side in enumerate((self.dip, self.lure)):
            logs[c] -= np.where(d.complete, 0, np.log(np.maximum(1 - side.unseen, SEEN_LEAST)))
        logs[0][d.known == 2] = -np.inf
        logs[1:, d.known == 1] = -np.inf
        most = logs.max(axis=0)
        shares = np.exp(logs - most)
        total = shares.sum(axis=0)
        self.p = shares / total
        chance = np.exp(self.log_chance)
        prior = (-0.5 * ((self.a - d.hit_mean) / d.hit_sd) ** 2 - 0.5 * ((self.b - d.lure_mean) / d.lure_sd) ** 2
                 + self.log_weight - np.exp(self.log_weight)
                 + self.log_chance - chance / d.chance - chance * d.days).sum()
        prior -= d.people * np.log(d.hit_sd * d.lure_sd) + (d.dips + d.lures + d.together) * d.days_total
        for value, (mean, sd) in ((self.beta, BETA), (self.gamma, GAMMA), (self.tau_dip, TAU),
                                  (self.tau_lure, TAU)):
            prior -= 0.5 * ((value - mean) / sd) ** 2
        prior -= KAPPA[1] * (np.log(self.kappa) + 0.5 * (KAPPA[0] / self.kappa) ** 2)
        return (most + np.log(total)).sum() + prior

    def newton(self, side, logit, mean, sd, growth, prior, tau):
        """Logits, growth and tau of one side; growth and logits together, person by person."""
        d = self.data
        x = d.x[d.group]
        slope = d.by_person(side.slope) - (logit - mean) / sd ** 2
        curve = d.by_person(side.curve) + 1 / sd ** 2
        cross = d.by_person(side.curve * x)
        up = (side.slope * x).sum() - (growth - prior[0]) / prior[1] ** 2 - (cross * slope / curve).sum()
        bend = (side.curve * x * x).sum() + 1 / prior[1] ** 2 - (cross ** 2 / curve).sum()
        step = np.clip(up / bend, -1.5, 1.5)
        pull = 1 / TAU[1] ** 2
        tau += np.clip((side.tau - (tau - TAU[0]) * pull) / (side.tau_curve + pull), -0.5, 0.5)
        return (logit + np.clip((slope - cross * step) / curve, -1.5, 1.5), growth + step,
                float(np.clip(tau, 0.05, 3)))

    def step(self):
        """M-step from the E-step of judge."""
        d = self.data
        self.dip.derive(d, self.p[0])
        self.lure.derive(d, self.p[1])
        self.a, self.beta, self.tau_dip = self.newton(self.dip, self.a, d.hit_mean, d.hit_sd, self.beta, BETA,
                                                      self.tau_dip)
        self.b, self.gamma, self.tau_lure = self.newton(self.lure, self.b, d.lure_mean, d.lure_sd, self.gamma,
                                                        GAMMA, self.tau_lure)
        both = self.p[2] * self.share_together
        alone = d.by_person(d.marked * (self.p[2] - both)[d.group])
        self.log_chance = np.log((alone + 1) / (d.days + 1 / d.chance))
        made = d.by_person(d.marked * both[d.group])
        invited = d.by_person((both * d.k / self.company)[d.group])
        self.log_weight = np.log((made + 1) / (invited + 1))
        agreed = np.where(d.k > 1, self.p[0] + self.p[1] + both, 0)
        self.kappa = np.sqrt(((agreed * d.spread).sum() + KAPPA[1] * KAPPA[0] ** 2)
                             / ((agreed * (d.k - 1)).sum() + KAPPA[1]))


def main():
    with tempfile.TemporaryDirectory() as folder:
        path = pathlib.Path(folder, 'campaign.txt')
        told = subprocess.run([PROGRAM, 'dump', str(REVIEWS), path], check=True, capture_output=True, text=True)
        data = Campaign(path)
    ours = float(told.stdout)
    fit = Fit(data)
    before, rounds, used = -np.inf, 0, time.process_time()
    while rounds < 3000:
        now = fit.judge()
        rounds += 1
        if abs(now - before) < 1e-13 * abs(now):
            break
        before = now
        fit.step()
    used = (time.process_time() - used) / rounds
    check('numpy climbs to the same optimum, to 1e-6 of the penalised log-likelihood',
          abs(now - data.log_likelihood) < 1e-6 * abs(now), f'{now} and {data.log_likelihood}')
    check('the probabilities there are the same to 1e-4', np.abs(fit.p[0] - data.probability).max() < 1e-4,
          np.abs(fit.p[0] - data.probability).max())
    check('hit and lure logits are the same to 1e-3',
          np.abs(np.array([fit.a, fit.b]) - data.theirs[:, :2].T).max() < 1e-3,
          np.abs(np.array([fit.a, fit.b]) - data.theirs[:, :2].T).max())
    print(f'{len(data.person)} looks: numpy {1e3 * used:.2f} ms a round ({rounds} rounds), '
          f'the program {1e3 * ours:.3f} ms ({data.rounds:.0f}), {used / ours:.1f} times, processor time, one core')
    finish()


main()
