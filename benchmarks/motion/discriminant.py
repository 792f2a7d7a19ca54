"""A linear discriminant whose settings are chosen inside, judged by cross-validation."""

from typing import NamedTuple

import numpy as np
import scipy.special


SHRINKAGES = (0.02, 0.05, 0.1, 0.2, 0.4, 0.6, 0.8, 0.95)
TEMPERS = (1.0, 3.0, 10.0, 30.0)  # scores are divided by it: features are not quite Gaussian


def discriminate(x: np.ndarray, label: np.ndarray, fresh: np.ndarray) -> list[np.ndarray]:
    """Return log-probabilities of fresh rows, for each shrinkage and temper.

    Gaussians of one covariance, `(1 - shrinkage) within + shrinkage I`, on standardised features.
    """
    middle, width = x.mean(0), x.std(0)
    width = np.where(width > 0, width, 1)
    # Cut off at three deviations: a Gaussian is too sure about what lies far out.
    x, fresh = (np.clip((rows - middle) / width, -3, 3) for rows in (x, fresh))
    means = np.array([x[label == k].mean(0) for k in range(label.max() + 1)])
    _, size, axes = np.linalg.svd(x - means[label], full_matrices=False)
    variance = size**2 / (len(x) - len(means))
    off = fresh[:, None] - means[None]
    along = (off @ axes.T) ** 2
    rest = np.sum(off**2, axis=2) - np.sum(along, axis=2)
    share, out = np.bincount(label) / len(label), []
    for g in SHRINKAGES:
        distance = np.sum(along / ((1 - g) * variance + g), axis=2) + rest / g
        for temper in TEMPERS:
            score = np.log(share)[None] - distance / (2 * temper)
            out.append(score - scipy.special.logsumexp(score, axis=1, keepdims=True))
    return out


def folds(label: np.ndarray, count: int, rng: np.random.Generator) -> np.ndarray:
    """Deal the recordings of each label out to the folds at random."""
    fold = np.empty(len(label), int)
    for k in np.unique(label):
        place = rng.permutation(np.flatnonzero(label == k))
        fold[place] = (np.arange(len(place)) + rng.integers(count)) % count
    return fold


def classify(
    variants: list[np.ndarray], label: np.ndarray, train: np.ndarray, rng: np.random.Generator
) -> np.ndarray:
    """Choose variant, shrinkage and temper on the training part; log-probabilities of the rest."""
    known = label[train]
    inner = folds(known, 5, rng)
    lost = np.zeros((len(variants), len(SHRINKAGES) * len(TEMPERS)))
    for i, x in enumerate(variants):
        for k in range(5):
            rest, apart = inner != k, inner == k
            found = discriminate(x[train][rest], known[rest], x[train][apart])
            lost[i] -= [log_p[np.arange(apart.sum()), known[apart]].sum() for log_p in found]
    variant, setting = np.unravel_index(np.argmin(lost), lost.shape)
    x = variants[variant]
    return discriminate(x[train], known, x[~train])[setting]


class Score(NamedTuple):
    accuracy: np.ndarray  # (repeat,)
    log_loss: np.ndarray  # (recording,): mean over repeats, nats
    shipped_accuracy: float
    shipped_log_loss: float


def judge(
    variants: list[np.ndarray], label: np.ndarray, shipped: np.ndarray, repeats: int
) -> Score:
    """Score features by repeated cross-validation, and on the split in which the data comes."""
    number = np.arange(len(label))
    right, lost = [], []
    for seed in range(repeats):
        rng = np.random.default_rng(seed)
        fold = folds(label, 5, rng)
        log_p = np.empty((len(label), 4))
        for k in range(5):
            log_p[fold == k] = classify(variants, label, fold != k, rng)
        right.append(np.mean(np.argmax(log_p, axis=1) == label))
        lost.append(-log_p[number, label])
    log_p = classify(variants, label, shipped, np.random.default_rng(0))
    test = label[~shipped]
    hit, apart = np.argmax(log_p, axis=1) == test, -log_p[np.arange(len(test)), test]
    return Score(np.array(right), np.mean(lost, axis=0), float(hit.mean()), float(apart.mean()))
