"""Telling changes apart: each kind made from its own definition, the verdict held against it."""

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray

from tracker.engine.detection.changes import judge
from tracker.engine.detection.evidence import Evidence
from tracker.engine.estimation.delay import delay_basis

FRAMES, ELEMENTS, RECEIVERS, TONES = 96, 48, 2, 48
SPACING_S = 1 / 28_000
Complex = NDArray[np.complex128]


def _gaussian(rng: np.random.Generator, *shape: int) -> Complex:
    return np.asarray((rng.normal(size=shape) + 1j * rng.normal(size=shape)) / np.sqrt(2))


class Link:
    """A link whose model is known exactly, and frames of it from before a change."""

    def __init__(self, seed: int, earlier: int = 0) -> None:
        self.rng = np.random.default_rng(seed)
        self.basis = delay_basis(64, 8, TONES, 8, 1)
        size = self.basis.shape[1]
        # Paths of a few delays, as real ones are: a delay that jumps then moves them along.
        self.direct = 1.5 * _gaussian(self.rng, RECEIVERS, size)
        self.surface = 0.35 * _gaussian(self.rng, ELEMENTS, RECEIVERS, size)
        self.states = self.rng.choice([-1.0, 1.0], (FRAMES, ELEMENTS))
        self.noise = _gaussian(self.rng, FRAMES, RECEIVERS, TONES)
        self.time_s = np.arange(FRAMES, dtype=np.float64) * SPACING_S
        self.earlier = earlier

    @property
    def bent(self) -> Complex:
        """Surface path of every frame."""
        return np.tensordot(self.states, self.surface, axes=1)

    def evidence(self, outputs: Complex, noise: Complex | None = None) -> Evidence:
        """Frames with these outputs, before noise."""
        heard = (outputs @ self.basis.T) + (self.noise if noise is None else noise)
        before = (self.direct + self.bent)[: self.earlier] @ self.basis.T + self.noise[: self.earlier]
        heard[: self.earlier] = before
        inside = heard @ self.basis.conj()
        ones = np.ones((FRAMES, 1))
        return Evidence(
            outputs=inside,
            regressors=np.hstack([ones, self.states]),
            states=self.states,
            model=np.concatenate([self.direct[None], self.surface]),
            elements=self.surface,
            prior=np.concatenate([[4.0], np.full(ELEMENTS, 0.12)]),
            outside=heard - inside @ self.basis.T,
            basis=self.basis,
            doubt=np.zeros((FRAMES, FRAMES)),
            time_s=np.asarray(self.time_s, dtype=np.float64),
        )


def _direct_path(link: Link) -> Evidence:
    return link.evidence(0.4 * link.direct + link.bent)


def _channel(link: Link) -> Evidence:
    fresh = 0.35 * _gaussian(link.rng, *link.surface.shape)
    return link.evidence(1.5 * _gaussian(link.rng, *link.direct.shape) + np.tensordot(link.states, fresh, axes=1))


def _motion(link: Link) -> Evidence:
    """Either path turns by a Doppler shift of its own, 30 and −45 Hz: 2 to 4 m/s at 3.75 GHz."""
    turns = [np.exp(2j * np.pi * hz * link.time_s)[:, None, None] for hz in (30.0, -45.0)]
    return link.evidence(turns[0] * link.direct + turns[1] * link.bent)


def _phase(link: Link) -> Evidence:
    return link.evidence(np.exp(0.9j) * (link.direct + link.bent))


def _offset(link: Link) -> Evidence:
    return link.evidence(np.exp(2j * np.pi * 400.0 * link.time_s)[:, None, None] * (link.direct + link.bent))


def _power(link: Link) -> Evidence:
    return link.evidence(0.7 * (link.direct + link.bent))


def _receiver_gain(link: Link) -> Evidence:
    return link.evidence(0.7 * (link.direct + link.bent), 0.7 * link.noise)


def _noise(link: Link) -> Evidence:
    return link.evidence(link.direct + link.bent, 1.3 * link.noise)


def _interference(link: Link) -> Evidence:
    noise = link.noise.copy()
    noise[:, 1, 20:22] *= 3.0
    return link.evidence(link.direct + link.bent, noise)


def _timing(link: Link) -> Evidence:
    """All tones turned as by half a sample."""
    turn = np.exp(-2j * np.pi * 0.5 * np.arange(TONES) / 64)
    return link.evidence(((link.direct + link.bent) @ link.basis.T * turn) @ link.basis.conj())


def _late(link: Link) -> Evidence:
    late = np.concatenate([link.bent[:1], link.bent[:-1]])
    return link.evidence(link.direct + late)


def _inverse(link: Link) -> Evidence:
    return link.evidence(link.direct - link.bent)


def _elements(link: Link) -> Evidence:
    """Three elements vanish."""
    shown = link.states.copy()
    shown[:, [5, 17, 40]] = 0.0
    return link.evidence(link.direct + np.tensordot(shown, link.surface, axes=1))


KINDS: list[tuple[str, Callable[[Link], Evidence]]] = [
    ("direct-path", _direct_path),
    ("channel", _channel),
    ("motion", _motion),
    ("phase", _phase),
    ("phase", _offset),
    ("gain", _power),
    ("gain", _receiver_gain),
    ("noise", _noise),
    ("interference", _interference),
    ("timing", _timing),
    ("mismatch", _late),
    ("mismatch", _inverse),
    ("elements", _elements),
]


@pytest.mark.parametrize(("kind", "make"), KINDS, ids=[make.__name__[1:] for _, make in KINDS])
def test_each_kind_is_told(kind: str, make: Callable[[Link], Evidence]) -> None:
    """The kind is found on five links."""
    assert [judge(make(Link(seed))).kind for seed in range(5)] == [kind] * 5


SUDDEN = [one for one in KINDS if one[0] != "motion"]


@pytest.mark.parametrize(("kind", "make"), SUDDEN, ids=[make.__name__[1:] for _, make in SUDDEN])
def test_frames_from_before_do_not_blur_what_is_sudden(kind: str, make: Callable[[Link], Evidence]) -> None:
    """The kind is found as well when the first 37 of the 96 frames are from before the change."""
    assert [judge(make(Link(seed, 37))).kind for seed in range(5)] == [kind] * 5


def test_nothing_changed_is_not_explained() -> None:
    """Frames that fit the model give "unclear" on all of 20 links: no freedom of any explanation pays."""
    assert {judge(Link(seed).evidence(Link(seed).direct + Link(seed).bent)).kind for seed in range(20)} == {"unclear"}


def test_the_receiver_that_is_interfered_with_is_named() -> None:
    """Only the second receiver has interference."""
    assert judge(_interference(Link(3))).receiver == 1


def test_what_mends_a_phase_or_a_gain_is_found() -> None:
    """A turn by 0.9 rad and a factor of 0.7 come back to 0.02 (six standard errors)."""
    turned, amplified = judge(_phase(Link(1))).mend, judge(_power(Link(1))).mend
    assert turned is not None
    assert amplified is not None
    np.testing.assert_allclose(np.angle(turned[1]), 0.9, atol=0.02)
    np.testing.assert_allclose(amplified[1].real, 0.7, atol=0.02)


def test_failing_elements_are_named() -> None:
    """The three that vanished, no others."""
    assert sorted(judge(_elements(Link(2))).elements) == [5, 17, 40]


def test_what_lies_outside_a_small_basis_is_said() -> None:
    """Pairs of elements were one unknown; when they part, the basis no longer fits."""
    link = Link(4)
    link.surface[1::2] = link.surface[::2]
    whole = link.evidence(link.direct + link.bent)
    apart = link.surface.copy()
    apart[1::2] += 0.3 * _gaussian(link.rng, ELEMENTS // 2, *link.surface.shape[1:])
    apart[::2] -= apart[1::2] - link.surface[1::2]
    small = replace(
        link.evidence(link.direct + np.tensordot(link.states, apart, axes=1)),
        regressors=np.hstack([np.ones((FRAMES, 1)), (link.states[:, ::2] + link.states[:, 1::2]) / np.sqrt(2)]),
        model=np.concatenate([link.direct[None], np.sqrt(2) * link.surface[::2]]),
        prior=whole.prior[: 1 + ELEMENTS // 2],
    )
    assert judge(small).kind == "basis"
