"""Checks of how a prior fits other markers, another side and other joints.

Shell over arrays. Conventions: docs/conventions.md.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from sta_prior.checks import IntArray
from sta_prior.prior.base import JointLabel
from sta_prior.prior.inputs import input_columns, row_count
from sta_prior.prior.statistics import mirror_signs
from sta_prior.testing.case import Case, differ
from sta_prior.testing.example import Setting


def _compare(case: Case, setting: Setting, keep: dict[str, IntArray], signs: bool, words: str) -> None:
    """Moments in another setting against those of the plain one, outputs kept and turned round."""
    names = [label.name for label in setting.joints]
    own_joints = [names.index(label.name) for label in case.prior.joints]
    order = input_columns(case.prior.inputs, own_joints, len(names))
    angles = np.zeros((case.angles.shape[0], row_count(case.prior.inputs, len(names)), 3))
    angles[:, order] = case.angles
    plain = case.artifacts(case.setting)
    for segment, artifact in case.artifacts(setting).items():
        own, turn = keep[segment], np.ones(keep[segment].size)
        if signs:
            turn = mirror_signs(own.size // 3)
        got, whole = artifact.moments(angles), plain[segment].moments(case.angles)
        derivative = np.zeros((angles.shape[0], own.size, *angles.shape[1:]))
        derivative[:, :, order] = whole.mean_derivative[:, own] * turn[:, None, None]
        k = whole.features.shape[1]
        constant = (plain[segment].residual.shape[0] * np.arange(k)[:, None] + own).reshape(-1)
        both = np.outer(turn, turn)
        pairs = {
            "mean": (got.mean, whole.mean[:, own] * turn),
            "mean_derivative": (got.mean_derivative, derivative),
            "features": (got.features, whole.features),
            "covariance": (got.covariance, whole.covariance[:, own[:, None], own] * both),
            "residual": (artifact.residual, plain[segment].residual[np.ix_(own, own)] * both),
            "constant_covariance": (
                artifact.constant_covariance,
                plain[segment].constant_covariance[np.ix_(constant, constant)]
                * np.kron(np.ones((k, k)), both),
            ),
        }
        for name, (one, other) in pairs.items():
            if differ(one, other):
                raise case.fail(segment, f"{name} {words}")


def _outputs(markers: list[int]) -> IntArray:
    return (3 * np.array(markers, dtype=np.int64)[:, None] + np.arange(3)).reshape(-1)


def _with_markers(case: Case, chosen: dict[str, list[int]], words: str) -> None:
    plain = case.setting
    setting = replace(
        plain,
        segments={name: tuple(plain.segments[name][i] for i in own) for name, own in chosen.items()},
        positions={name: plain.positions[name][own] for name, own in chosen.items()},
    )
    _compare(case, setting, {name: _outputs(own) for name, own in chosen.items()}, False, words)


def check_markers(case: Case) -> bool:
    """Markers may stand in another order; some of them have the marginal of all."""
    counts = {name: len(own) for name, own in case.setting.segments.items()}
    turned = {name: list(range(count))[::-1] for name, count in counts.items()}
    _with_markers(case, turned, "changes with the order of the markers")
    # Where any markers do there is no whole set to be marginal of.
    some = {
        name: own[: max(1, len(own) - 1)] if case.prior.segments[name].markers else own
        for name, own in turned.items()
    }
    _with_markers(case, some, "of some of the markers is not the marginal of all")
    return True


def check_side(case: Case) -> bool:
    """A left side is the mirror image of a right one."""
    keep = {name: _outputs(list(range(len(own)))) for name, own in case.setting.segments.items()}
    mirrored = replace(case.setting, side="left")
    _compare(case, mirrored, keep, True, "of a left side is not the mirror image of a right one")
    return True


def check_joints(case: Case) -> bool:
    """The trial may have its joints in another order, and others besides."""
    other = JointLabel("another", "cardan", "a", "b", ("rotation_1", "rotation_2", "rotation_3"))
    setting = replace(
        case.setting,
        joints=(other, *case.prior.joints[::-1]),
        angles=np.concatenate([np.full((1, 3), 0.7), case.setting.angles[::-1]]),
    )
    keep = {name: _outputs(list(range(len(own)))) for name, own in case.setting.segments.items()}
    _compare(case, setting, keep, False, "changes with the order of the trial's joints")
    return True
