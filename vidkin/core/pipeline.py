"""Composes the stages: marks and a first pass over the clip, then track, steps, motion and fit."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field

from vidkin.core import track as tracking
from vidkin.core.camera import resect
from vidkin.core.fit import fit_motion
from vidkin.core.motion import measure
from vidkin.core.steps import find_steps
from vidkin.notices import Failure
from vidkin.stages import Analysis, Camera, Footage, Frame, FrameSource, Rep, Settings

Progress = Callable[[str, int], None]


@dataclass(slots=True)
class Scan:
    """Takes in a first pass over the clip: resects the camera on the first frame, then samples the background.

    Hand `visit` to the reader; afterwards the scan is an argument of `analyse`. `picture` is the first frame,
    kept for the marker overlay.
    """

    rep: Rep
    camera: Camera | Failure | None = None
    picture: Frame | None = None
    _area: tracking.Corridor | None = field(default=None, repr=False)
    _sampler: tracking.Sampler | None = field(default=None, repr=False)
    _failure: Failure | None = None

    def visit(self, frame: Frame) -> None:
        """Offer the next frame."""
        if self.picture is None:
            self.picture = frame
            height, width = frame.luma.shape
            self.camera = resect(
                self.rep.marks,
                (width, height),
                prior=self.rep.camera,
                lane=self.rep.lane,
                sightings=self.rep.sightings,
            )
            if self.camera:
                ready = tracking.sampler(self.camera, self.rep.lane)
                if isinstance(ready, Failure):
                    self._failure = ready
                else:
                    self._area, self._sampler = ready
        if self._sampler is not None:
            self._sampler.add(frame)


def analyse(
    scan: Scan,
    footage: Footage,
    frames: FrameSource,
    *,
    settings: Settings | None = None,
    progress: Progress | None = None,
) -> Analysis:
    """The whole job on one rep.

    Parameters
    ----------
    scan : Scan
        After it has visited every frame of the clip.
    footage : Footage
        The clip's facts.
    frames : callable
        Starts a fresh pass over the clip.
    settings : Settings, optional
    progress : callable, optional
        Called with a stage's name and the number of frames done.

    Returns
    -------
    Analysis
        Stages after a Failure are None.
    """
    settings = settings or Settings()
    rep = scan.rep
    if scan.camera is None:
        raise ValueError("analyse: the scan has seen no frame")
    if not scan.camera:
        return Analysis(rep=rep, settings=settings, footage=footage, camera=scan.camera)
    camera = scan.camera
    if scan._area is None or scan._sampler is None:
        return Analysis(rep=rep, settings=settings, footage=footage, camera=camera, track=scan._failure)
    track = tracking.follow(
        frames(),
        scan._area,
        scan._sampler,
        progress=None if progress is None else lambda index: progress("track", index + 1),
    )
    if not track:
        return Analysis(rep=rep, settings=settings, footage=footage, camera=camera, track=track)
    steps = find_steps(track, camera, rep.lane)
    motion = measure(track, camera, rep.lane, steps=steps, settings=settings)
    if progress is not None:
        progress("fit", footage.t_s.size)
    fit = fit_motion(motion, rep, steps=steps, settings=settings) if motion else None
    return Analysis(
        rep=rep, settings=settings, footage=footage, camera=camera, track=track, steps=steps, motion=motion, fit=fit
    )
