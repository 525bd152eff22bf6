"""Scenes with known truth, and companions injected into real cubes.

The simulator shares no operator with the search: its Doppler shift, line-spread function, pixel
integration, point-spread function and information limit are written here, from scratch. If it did
share them, an efficiency near one would be true by construction and would prove nothing.
"""

from xcorr.simulate.detector import Correlation
from xcorr.simulate.factory import SceneFactory, simulate_scene
from xcorr.simulate.ideal import SignalModel, information
from xcorr.simulate.inject import inject
from xcorr.simulate.presets import demo_companion, demo_scene, quick_settings
from xcorr.simulate.scene import Exposure, Scene, ideal_snr
from xcorr.simulate.settings import SceneSettings

__all__ = [
    "Correlation",
    "Exposure",
    "Scene",
    "SceneFactory",
    "SceneSettings",
    "SignalModel",
    "demo_companion",
    "demo_scene",
    "ideal_snr",
    "information",
    "inject",
    "quick_settings",
    "simulate_scene",
]
