"""Every number of a calibration under one name: its path in the module file, or what the summary calls it.

Repeatability, limits and batches all speak of numbers by these names.
"""

from dataclasses import dataclass
from typing import Any

from hybridtrack.calibration.view_data import MAP_PARAMETERS
from hybridtrack.module import Contrast, HybridModule, Timing

LENS = tuple(f"lens.{name}" for name in ("fx", "fy", "cx", "cy", "k1", "k2", "k3", "k4", "p1", "p2"))
CENTROID = ("colour_from_event.centroid_u", "colour_from_event.centroid_v")
TIMING = tuple(f"timing.{name}" for name in Timing.model_fields if name != "drift_epoch_ns")
CONTRAST = tuple(f"contrast.{name}" for name in Contrast.model_fields if not name.startswith("map_"))
COUNTS = ("defects.hot", "defects.dead")
SUMMARY = ("blink_hz", "corner_rms_px", "views_with_board", "lattice_p_value")
KNOWN = (*LENS, *MAP_PARAMETERS, *CENTROID, *TIMING, *CONTRAST, *COUNTS, *SUMMARY)


@dataclass(frozen=True)
class Number:
    """A value and its deviation; either may be unknown."""

    value: float | None
    sigma: float | None = None

    @property
    def is_known(self) -> bool:
        """Whether there is a value."""
        return self.value is not None


def _values(module: HybridModule) -> dict[str, float | None]:
    """Values by name; what the module has no block for is left out."""
    found: dict[str, float | None] = {}
    lens = module.lens
    if lens is not None:
        found |= {f"lens.{name}": getattr(lens, name) for name in ("fx", "fy", "cx", "cy")}
        found |= {f"lens.k{k}": value for k, value in enumerate(lens.radial, start=1)}
        found |= {f"lens.p{k}": value for k, value in enumerate(lens.tangential or (), start=1)}
    event_map = module.colour_from_event
    if event_map is not None:
        terms = (*event_map.matrix[0], *event_map.matrix[1], event_map.radial)
        found |= dict(zip(MAP_PARAMETERS, terms, strict=True))
        found |= dict(zip(CENTROID, event_map.centroid or (None, None), strict=True))
        found["lattice_p_value"] = event_map.lattice.p_value if event_map.lattice is not None else None
    for block, names in (("timing", TIMING), ("contrast", CONTRAST)):
        held = getattr(module, block)
        if held is not None:
            found |= {name: getattr(held, name.split(".")[1]) for name in names}
    if module.defects is not None:
        found |= {"defects.hot": len(module.defects.hot), "defects.dead": len(module.defects.dead)}
    return found


def named_numbers(module: HybridModule, summary: dict[str, Any] | None = None) -> dict[str, Number]:
    """All numbers of a calibrated module, and those that only its `summary` holds; keys are among KNOWN."""
    uncertainty = module.uncertainty
    # The centroid is where the map's constant terms lie: it moves with them.
    twin = dict(zip(CENTROID, ("colour_from_event.c", "colour_from_event.f"), strict=True))
    numbers = {
        name: Number(value, uncertainty.of(twin.get(name, name)) if uncertainty is not None else None)
        for name, value in _values(module).items()
    }
    if summary is not None:
        numbers["blink_hz"] = Number(summary["blink_hz"]["value"], summary["blink_hz"]["sigma"])
        numbers["corner_rms_px"] = Number(summary["corner_rms_px"])
        numbers["views_with_board"] = Number(summary["views_with_board"])
    return {name: numbers[name] for name in KNOWN if name in numbers}
