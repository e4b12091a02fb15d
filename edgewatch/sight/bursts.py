"""Bursts: points from which three or more arms run out.

``candidates`` finds points that may be one, ``rings`` reads the picture about them, and ``burst_net`` judges what is
read. It tells where the burst is, since what is seen of a late one lies further down the stream, whether it went off
before the exposure, and whether an earlier picture showed it. Of candidates near to each other the likeliest stays.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from edgewatch.sight import burst_weights as learnt
from edgewatch.sight import native, rings
from edgewatch.sight.burst_net import (
    FIRST_PLACES,
    FIRST_REACH,
    FIRST_STEP,
    SECOND_PLACES,
    SECOND_REACH,
    SECOND_STEP,
    SIFT_LEAST,
    judge_patches,
    probability,
    sift_patches,
)
from edgewatch.sight.candidates import RULES, find_candidates, record, squared_gaps
from edgewatch.sight.native import records
from edgewatch.sight.optics import Optics
from edgewatch.sight.ridges import Ridges
from edgewatch.sight.rings import (
    BEFORE_RINGS,
    CONTEXT_SIZE,
    CROWD_PX,
    LEVEL_NOISE,
    RING_DIRECTIONS,
    RING_RADII_PX,
    RINGS,
    RINGS_BEFORE,
    RINGS_SIFT,
    directions,
    likeness,
    read_before,
    read_camera,
    read_context,
    read_patches,
    read_rough,
)
from edgewatch.sight.segments import Segments
from edgewatch.sight.share import BurstShare

UNMOVED_LEAST, UNMOVED_MOST = 0.9, 0.6
"""What looked the same in the picture before, by this cosine, is news by no more than the second probability: arms fly
on and fade, the net knows, and takes for news what does neither."""

MERGE_PX = 13.0
"""Of candidates nearer to each other than this only the likeliest is kept (px)."""

FARTHEST_PX = 30.0
"""The net moves a candidate by no more than this either way (px): what is seen of a late burst has flown on from it."""

LEAST_ENDS = 2
"""Within the outermost ring at least so many ends of pieces lie, one line: a lone bright spot is a hot pixel."""

CONTACT_PX = 12.0
"""Nothing nearer to the contact point than this is a burst (px): sparks leave it in every direction."""

SIFT_BLOCK = 24
"""The compiled sieve takes its units so many at a time."""

FIRST_ROOM = 256
"""The compiled form makes room for so many candidates to begin with: twice what a full stream has."""


@dataclass(frozen=True, slots=True, eq=False)
class Apexes:
    """Bursts of one picture, arrays of length M: ``at`` float64 (M, 2) px; float64 probabilities: ``sure`` of being
    one, ``late`` that it went off before the exposure, ``fresh`` that no earlier picture showed it.
    """

    at: NDArray[np.float64]
    sure: NDArray[np.float64]
    late: NDArray[np.float64]
    fresh: NDArray[np.float64]

    def take(self, rows: NDArray[np.bool_] | NDArray[np.int64]) -> Apexes:
        """Some of them."""
        return Apexes(at=self.at[rows], sure=self.sure[rows], late=self.late[rows], fresh=self.fresh[rows])


def find_apexes(
    pieces: Segments,
    ridges: Ridges,
    optics: Optics,
    least_sure: float,
    before: Ridges | None = None,
    share: BurstShare | None = None,
    work: Workroom | None = None,
) -> Apexes:
    """Bursts of one picture: candidates of at least the probability ``least_sure``. ``before``: ridges of the picture
    before; ``share``: of bursts among the candidates of this stream, which learns from this picture; ``work``: kept by
    who looks at one picture after the other, and by one thread only.
    """
    if native.LIBRARY:
        return _find_compiled(pieces, ridges, optics, least_sure, before, share, work or Workroom())
    contact_px, noise = optics.contact_px, ridges.threshold_noise
    at = find_candidates(pieces, ridges)
    at = at[np.hypot(at[:, 0] - contact_px[0], at[:, 1] - contact_px[1]) > CONTACT_PX]  # its own glow is no burst
    at = at[sift_patches(read_rough(at, ridges, contact_px)) >= SIFT_LEAST]
    context = read_context(at, pieces, noise, optics, has_before=before is not None)
    patches, earlier = read_patches(at, ridges.blurred, noise, contact_px), read_before(at, before, contact_px)
    answers = judge_patches(patches, earlier, context)
    unmoved = likeness(patches, earlier) > UNMOVED_LEAST
    if share is None:
        sure = probability(answers[:, 0])
    else:
        sure = probability(answers[:, 0] + share.shift)
        expected = probability((context @ learnt.SHARE + learnt.SHARE_BIAS)[:, 0])
        share.learn(float(sure.sum()), float(expected.sum()), len(sure))
    likely = np.flatnonzero(sure >= least_sure)
    at, sure, answers, unmoved = at[likely], sure[likely], answers[likely], unmoved[likely]
    ahead, shift = directions(at, contact_px), np.clip(answers[:, 1:3], -FARTHEST_PX, FARTHEST_PX)
    at = at + shift[:, :1] * ahead + shift[:, 1:] * np.stack([-ahead[:, 1], ahead[:, 0]], axis=1)
    keep = _likeliest(at, sure, pieces)
    fresh = probability(answers[:, 4])
    fresh = np.where(unmoved, np.minimum(fresh, UNMOVED_MOST), fresh)
    return Apexes(at=at, sure=sure, late=probability(answers[:, 3]), fresh=fresh).take(keep)


class Workroom:
    """Arrays in which the compiled form works, kept from picture to picture and made larger when they have to be."""

    def __init__(self) -> None:
        """Room is made with the first picture."""
        self.room = 0
        self.camera_of: tuple[float, Optics, bool] | None = None

    def camera(self, noise: float, optics: Optics, *, has_before: bool) -> NDArray[np.float32]:
        """As ``read_camera`` has it; noise is measured in one of some pictures, so most are as the last."""
        last = self.camera_of
        if last is None or last[0] != noise or last[1] is not optics or last[2] != has_before:
            self.camera_of = noise, optics, has_before
            self.last_camera = read_camera(noise, optics, has_before=has_before)
        return self.last_camera

    def make(self, room: int) -> None:
        """Make room for so many candidates."""
        taps, channels = 2 * FIRST_REACH + 1, len(RING_RADII_PX) + len(BEFORE_RINGS)
        second_taps = 2 * SECOND_REACH + 1
        first, second, hidden = (layer.shape[1] for layer in (learnt.FIRST, learnt.SECOND, learnt.HIDDEN))
        self.at, self.alike = np.empty((room, 2)), np.empty(room)
        self.context = np.empty((room, CONTEXT_SIZE), np.float32)
        self.first_windows = np.empty((room * FIRST_PLACES, taps * channels), np.float32)
        self.first = np.empty((room * FIRST_PLACES, first), np.float32)
        self.second_windows = np.empty((room * SECOND_PLACES, second_taps * first), np.float32)
        self.second = np.empty((room * SECOND_PLACES, second), np.float32)
        self.joint = np.empty((room, SECOND_PLACES * second + CONTEXT_SIZE), np.float32)
        self.hidden = np.empty((room, hidden), np.float32)
        self.place = {name: native.place(array) for name, array in vars(self).items() if isinstance(array, np.ndarray)}
        self.room = room


_SHARED = np.asarray(BEFORE_RINGS, np.int32)
_LOOK = records.LookRules(
    now=rings.record(RINGS),
    before=rings.record(RINGS_BEFORE),
    sift=rings.record(RINGS_SIFT),
    sift_weights=native.place(learnt.SIFT),
    sift_bias=native.place(learnt.SIFT_BIAS),
    sifted_weights=native.place(learnt.SIFTED),
    shared=native.place(_SHARED),
    contact_px=CONTACT_PX,
    crowd_px=CROWD_PX,
    sifted_bias=float(learnt.SIFTED_BIAS[0]),
    sift_least=math.log(SIFT_LEAST / (1.0 - SIFT_LEAST)),
    level_noise=LEVEL_NOISE,
    sift_units=learnt.SIFT.shape[1],
    directions=RING_DIRECTIONS,
    rings=len(RING_RADII_PX),
    rings_before=len(BEFORE_RINGS),
    reach=FIRST_REACH,
    step=FIRST_STEP,
    context=CONTEXT_SIZE,
)
_NET = records.Net(
    first_bias=native.place(learnt.FIRST_BIAS),
    second_bias=native.place(learnt.SECOND_BIAS),
    hidden_bias=native.place(learnt.HIDDEN_BIAS),
    output=native.place(learnt.OUTPUT),
    output_bias=native.place(learnt.OUTPUT_BIAS),
    share=native.place(learnt.SHARE),
    share_bias=native.place(learnt.SHARE_BIAS),
    first_units=learnt.FIRST.shape[1],
    second_units=learnt.SECOND.shape[1],
    hidden_units=learnt.HIDDEN.shape[1],
    outputs=learnt.OUTPUT.shape[1],
    context=CONTEXT_SIZE,
    places=SECOND_PLACES,
    reach=SECOND_REACH,
    step=SECOND_STEP,
)


def _find_compiled(
    pieces: Segments,
    ridges: Ridges,
    optics: Optics,
    least_sure: float,
    before: Ridges | None,
    share: BurstShare | None,
    work: Workroom,
) -> Apexes:
    """As ``find_apexes`` has it; only the net's matrix products are numpy's."""
    traced = record(pieces, ridges, optics.contact_px)
    camera = work.camera(ridges.threshold_noise, optics, has_before=before is not None)
    if not work.room:
        work.make(FIRST_ROOM)
    while True:
        count = native.LIBRARY.edgewatch_look(
            native.reference(traced),
            None if before is None else native.start(before.blurred),
            native.double(0.0 if before is None else before.threshold_noise),
            native.reference(RULES),
            native.reference(_LOOK),
            native.start(camera),
            *(work.place[name] for name in ("at", "context", "alike", "first_windows")),
            work.room,
        )
        if native.enough(count, work.room):
            break
        work.make(2 * count)
    place, net = work.place, native.reference(_NET)
    rows = count * FIRST_PLACES
    np.matmul(work.first_windows[:rows], learnt.FIRST, out=work.first[:rows])
    native.LIBRARY.edgewatch_second(count, net, place["first"], place["second_windows"])
    rows = count * SECOND_PLACES
    np.matmul(work.second_windows[:rows], learnt.SECOND, out=work.second[:rows])
    native.LIBRARY.edgewatch_joint(count, net, place["second"], place["context"], place["joint"])
    np.matmul(work.joint[:count], learnt.HIDDEN, out=work.hidden[:count])
    at, values, told = np.empty((count, 2)), np.empty((3, count)), records.Told()
    rules = records.ChoiceRules(
        shift=share.shift if share else 0.0,
        least_sure=least_sure,
        farthest_px=FARTHEST_PX,
        unmoved_least=UNMOVED_LEAST,
        unmoved_most=UNMOVED_MOST,
        merge_px=MERGE_PX,
        ends_px=RING_RADII_PX[-1],
        least_ends=LEAST_ENDS,
    )
    found = native.LIBRARY.edgewatch_choose(
        count,
        net,
        native.reference(rules),
        native.reference(traced),
        *(place[name] for name in ("at", "context", "alike", "hidden")),
        native.reference(told),
        native.start(at),
        native.start(values),
    )
    native.enough(found, count)
    if share:
        share.learn(told.found, told.expected, count)
    sure, late, fresh = values[:, :found]
    return Apexes(at=at[:found], sure=sure, late=late, fresh=fresh)


def _likeliest(at: NDArray[np.float64], sure: NDArray[np.float64], pieces: Segments) -> NDArray[np.bool_]:
    """Which of bursts (M, 2), with their probabilities (M,), stay: of some near to each other one."""
    if native.LIBRARY:
        keep = np.empty(len(at), np.bool_)
        native.LIBRARY.edgewatch_merge(
            len(at),
            native.place(at),
            native.place(sure),
            pieces.length.size,
            native.place(pieces.begin),
            native.place(pieces.end),
            native.double(RING_RADII_PX[-1]),
            LEAST_ENDS,
            native.double(MERGE_PX),
            native.place(keep),
        )
        return keep
    ends = np.concatenate([pieces.begin, pieces.end])
    near = np.count_nonzero(squared_gaps(at, ends) < RING_RADII_PX[-1] ** 2, axis=1)
    order = np.arange(sure.size)
    better = (sure[None] > sure[:, None]) | ((sure[None] == sure[:, None]) & (order[None] < order[:, None]))
    better &= squared_gaps(at, at) < MERGE_PX**2
    return np.asarray((near >= LEAST_ENDS) & ~better.any(axis=1))
