"""Recordings that several tests of the room read; each is made once."""

import sys
from dataclasses import replace
from pathlib import Path

import pytest

# Helpers beside the tests; importlib mode leaves their folder off the path.
sys.path.insert(0, str(Path(__file__).parent))

from ideal_board import Scene, board_target, opened, small_module, tilted_poses


@pytest.fixture(scope="session")
def folder(tmp_path_factory):
    """A folder for the session's recordings."""
    return tmp_path_factory.mktemp("boards")


@pytest.fixture(scope="session")
def clean_scene():
    """Four noiseless views of a shuttered board, clocks a little off."""
    return Scene(poses=tilted_poses(4))


@pytest.fixture(scope="session")
def clean(clean_scene, folder):
    """Recording of `clean_scene`."""
    with opened(clean_scene, folder, "clean") as recording:
        yield recording


@pytest.fixture(scope="session")
def noisy_scene(clean_scene):
    """Eight-bit frames with noise, background events, hot and dead pixels, mismatched thresholds."""
    module = small_module()
    contrast = module.contrast.model_copy(update={"on_spread": 0.012, "off_spread": 0.014})
    timing = module.timing.model_copy(
        update={"frame_offset_ns": -1.7e6, "exposure_correction_ns": 35e3, "frame_drift_ppm": 12.0}
    )
    module = module.model_copy(update={"contrast": contrast, "timing": timing})
    return replace(
        clean_scene,
        module=module,
        poses=tilted_poses(6, 3),
        noise_dn=1.0,
        quantise=True,
        background_hz=0.3,
        hot=((10, 10), (60, 40)),
        dead=((55, 33), (64, 38)),
        seed=5,
    )


@pytest.fixture(scope="session")
def noisy(noisy_scene, folder):
    """Recording of `noisy_scene`."""
    with opened(noisy_scene, folder, "noisy") as recording:
        yield recording


@pytest.fixture(scope="session")
def counterphase_scene(clean_scene):
    """Three views of a screen whose two sets alternate."""
    target = board_target(kind="counterphase_checker", steady_dark=[], blink_hz=72.0)
    return replace(clean_scene, target=target, poses=tilted_poses(3, 8), true_blink_hz=71.6, noise_dn=0.5)


@pytest.fixture(scope="session")
def counterphase(counterphase_scene, folder):
    """Recording of `counterphase_scene`."""
    with opened(counterphase_scene, folder, "counterphase") as recording:
        yield recording
