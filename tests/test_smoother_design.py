"""What a prior hands the smoother: its design, made from its moments or its own, restricted and augmented."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import pytest
from made_problems import made_angles, made_artifact, random_covariance
from made_trajectories import Widened

from sta_prior.checks import FloatArray
from sta_prior.prior.artifact import FeatureArtifact
from sta_prior.prior.augmented import Augmented
from sta_prior.prior.basis import Reach
from sta_prior.prior.family import restrict
from sta_prior.prior.interface import Artifact, Design, IsotropicArtifact, Moments, design_of

OFFERED = ("mean", "mean_derivative", "features", "feature_derivative")
ANGLES = made_angles(np.random.default_rng(71), 30, 2)


@dataclass(frozen=True)
class MomentsOnly:
    """An artifact of a plug-in that offers no design of its own."""

    inner: Artifact

    @property
    def residual(self) -> FloatArray:
        return self.inner.residual

    @property
    def time_constant(self) -> float:
        return self.inner.time_constant

    @property
    def constant_covariance(self) -> FloatArray:
        return self.inner.constant_covariance

    def moments(self, angles: FloatArray) -> Moments:
        return self.inner.moments(angles)


def reaching(seed: int, markers: int = 4, joints: tuple[int, ...] = (0, 1)) -> FeatureArtifact:
    """An artifact whose training data ends at 30° of the first joint's flexion, growing beyond."""
    rng = np.random.default_rng(seed)
    artifact = made_artifact(rng, markers, joints)
    reaches = (Reach(joints[0], 0, np.radians(-5.0), np.radians(30.0)),)
    magnitude = random_covariance(rng, 3 * markers, 0.01)
    return replace(artifact, basis=replace(artifact.basis, reaches=reaches), magnitude=magnitude)


def clear_of_the_edge(angles: FloatArray) -> FloatArray:
    """Frames inside the training data, or well beyond it: growth that is hardly there counts as none."""
    flexion = np.degrees(angles[:, 0, 0])
    return angles[(flexion < 30.0) | (flexion > 34.0)]


def agree(first: Design, second: Design, tolerance: float) -> None:
    for name in OFFERED:
        wanted = getattr(second, name)
        np.testing.assert_allclose(
            getattr(first, name),
            wanted,
            rtol=0,
            atol=tolerance * max(np.abs(wanted).max(initial=0.0), 1e-12),
            err_msg=name,
        )
    assert (first.growth is None) == (second.growth is None)
    if first.growth is not None and second.growth is not None:
        np.testing.assert_allclose(
            first.growth, second.growth, rtol=0, atol=tolerance * np.abs(second.growth).max()
        )


def whole_covariance(artifact: Artifact, design: Design) -> FloatArray:
    """Z P Zᵀ + R + growth with Z = z ⊗ 1, frame by frame."""
    n = artifact.residual.shape[0]
    result = []
    for frame, values in enumerate(design.features):
        features = np.kron(values, np.eye(n))
        whole = features @ artifact.constant_covariance @ features.T + artifact.residual
        result.append(whole if design.growth is None else whole + design.growth[frame])
    return np.array(result)


def consistent(artifact: Artifact, angles: FloatArray) -> Design:
    """A design says what the moments say, and its derivatives are those of central differences."""
    design, moments = design_of(artifact, angles), artifact.moments(angles)
    np.testing.assert_allclose(design.mean, moments.mean, rtol=0, atol=1e-15)
    np.testing.assert_allclose(design.mean_derivative, moments.mean_derivative, rtol=0, atol=1e-14)
    np.testing.assert_allclose(design.features, moments.features, rtol=0, atol=1e-14)
    scale = np.abs(moments.covariance).max()
    np.testing.assert_allclose(
        whole_covariance(artifact, design), moments.covariance, rtol=0, atol=1e-10 * scale
    )
    for joint in range(angles.shape[1]):
        for column in range(3):
            step = np.zeros(angles.shape[1:])
            step[joint, column] = 1e-5
            ahead, behind = design_of(artifact, angles + step), design_of(artifact, angles - step)
            for name, derivative in (("mean", "mean_derivative"), ("features", "feature_derivative")):
                wanted = (getattr(ahead, name) - getattr(behind, name)) / 2e-5
                got = getattr(design, derivative)[..., joint, column]
                tolerance = 1e-6 * max(np.abs(getattr(design, derivative)).max(initial=0.0), 1e-6)
                np.testing.assert_allclose(got, wanted, rtol=0, atol=tolerance)
    return design


@pytest.mark.parametrize("seed", [72, 73])
def test_a_design_made_from_the_moments_is_the_artifacts_own(seed: int) -> None:
    artifact, angles = reaching(seed), clear_of_the_edge(ANGLES)
    own = artifact.design(angles)
    assert own.growth is not None
    agree(design_of(MomentsOnly(artifact), angles), own, 1e-6)


def test_growth_stands_only_in_the_frames_beyond_the_data() -> None:
    artifact, angles = reaching(74), clear_of_the_edge(ANGLES)
    beyond = np.degrees(angles[:, 0, 0]) > 30.0
    for kind in (artifact, MomentsOnly(artifact)):
        growth = design_of(kind, angles).growth
        assert growth is not None
        np.testing.assert_array_equal(np.einsum("faa->fa", growth).sum(axis=1) > 0.0, beyond)
        assert design_of(kind, angles[~beyond]).growth is None
        assert np.linalg.eigvalsh(growth).min() > -1e-12 * np.abs(growth).max()


def test_an_own_design_is_taken_before_the_moments() -> None:
    artifact = made_artifact(np.random.default_rng(75), 4, [0])
    wider = Widened(artifact, np.radians(30.0), 1e-5 * np.eye(12))
    agree(design_of(wider, ANGLES), wider.design(ANGLES), 0.0)
    consistent(wider, ANGLES)
    agree(design_of(MomentsOnly(wider), ANGLES), wider.design(ANGLES), 1e-6)


def test_without_features_there_is_nothing_to_differentiate() -> None:
    design = consistent(IsotropicArtifact(12, 0.005), ANGLES)
    assert design.features.shape == (30, 0)
    assert design.feature_derivative.shape == (30, 0, 2, 3)
    assert design.growth is None


@pytest.mark.parametrize("side", ["right", "left"])
@pytest.mark.parametrize("markers", [(0, 1, 2, 3), (2, 0), (1,)])
def test_a_restricted_design_is_that_of_its_own_moments(side: str, markers: tuple[int, ...]) -> None:
    """Kept markers, mirrored signs, the prior's joints at places 2 and 0 of the trial's three."""
    artifact = reaching(76)
    outputs = (3 * np.array(markers)[:, None] + np.arange(3)).ravel()
    angles = made_angles(np.random.default_rng(77), 30, 3)
    angles = angles[:, [1, 2, 0]]
    flexion = np.degrees(angles[:, 2, 0])
    angles = angles[(flexion < 30.0) | (flexion > 34.0)]
    inner = artifact.design(angles[:, [2, 0]])
    kept = restrict(artifact, outputs, side, (2, 0), 3)
    design = consistent(kept, angles)
    signs = np.tile([1.0, 1.0, -1.0 if side == "left" else 1.0], len(markers))
    np.testing.assert_array_equal(design.mean, inner.mean[:, outputs] * signs)
    np.testing.assert_array_equal(design.features, inner.features)
    np.testing.assert_array_equal(design.feature_derivative[:, :, [2, 0]], inner.feature_derivative)
    assert np.abs(design.feature_derivative[:, :, 1]).max() == 0.0
    assert inner.growth is not None
    assert design.growth is not None
    wanted = inner.growth[:, outputs[:, None], outputs] * np.outer(signs, signs)
    np.testing.assert_array_equal(design.growth, wanted)
    # The same whether what is restricted has a design of its own or not.
    agree(design_of(restrict(MomentsOnly(artifact), outputs, side, (2, 0), 3), angles), design, 1e-6)
    agree(design_of(MomentsOnly(kept), angles), design, 1e-6)


@pytest.mark.parametrize("others_grow", [False, True])
def test_an_augmented_design_is_that_of_its_own_moments(others_grow: bool) -> None:
    """Markers 0 and 2 from a prior, 1 and 3 of another: nothing is shared but the angles."""
    known = reaching(78, markers=2, joints=(0,))
    others: Artifact = reaching(79, markers=2, joints=(0, 1)) if others_grow else IsotropicArtifact(6, 0.01)
    places = (3 * np.array([[0, 2], [1, 3]])[..., None] + np.arange(3)).reshape(2, 6)
    both = Augmented(known, others, places[0], places[1])
    angles = clear_of_the_edge(ANGLES)
    design = consistent(both, angles)
    assert both.time_constant == known.time_constant
    for at, part in zip(places, (known, others), strict=True):
        alone = design_of(part, angles)
        np.testing.assert_array_equal(design.mean[:, at], alone.mean)
        assert design.growth is not None
        inside = design.growth[:, at[:, None], at]
        np.testing.assert_array_equal(inside, np.zeros_like(inside) if alone.growth is None else alone.growth)
    assert np.abs(whole_covariance(both, design)[:, places[0][:, None], places[1]]).max() == 0.0
    agree(design_of(MomentsOnly(both), angles), design, 1e-6)
