"""Forward simulator: known truth to marks, pixels and rendered frames of a sprinter filmed from the side."""

from vidkin.core.synth.chance import random_scene
from vidkin.core.synth.film import Film, empty_picture, render
from vidkin.core.synth.known import Truth, truth
from vidkin.core.synth.props import marks
from vidkin.core.synth.scene import Light, Markers, Outfit, Place, Runner, Scene, Sensor

__all__ = [
    "Film",
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
