"""Forward simulator: known truth to marks, pixels and rendered frames of a sprinter filmed from the side."""

from vidkin.core.synth.chance import random_scene
from vidkin.core.synth.props import marks
from vidkin.core.synth.render import empty_picture, render
from vidkin.core.synth.scene import Light, Markers, Outfit, Place, Runner, Scene, Sensor
from vidkin.core.synth.truth import Truth, truth

__all__ = [
    "Light",
    "Markers",
    "Outfit",
    "Place",
    "Runner",
    "Scene",
    "Sensor",
    "Truth",
    "empty_picture",
    "marks",
    "random_scene",
    "render",
    "truth",
]
