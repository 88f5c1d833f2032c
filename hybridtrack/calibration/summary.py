"""A calibration as plain numbers, for `summary.json`."""

from typing import Any

from hybridtrack.calibration.calibrate import CalibrationResult
from hybridtrack.module import HybridModule


def numbers_of(module: HybridModule) -> dict[str, dict[str, float | None]]:
    """Every parameter in the joint covariance: value, deviation, by its path in the module file."""
    document = module.model_dump()
    matrix = module.colour_from_event.matrix if module.colour_from_event is not None else ((0.0,) * 3,) * 2
    special = dict(zip("abcdef", (*matrix[0], *matrix[1]), strict=True))
    radial = (module.lens.radial if module.lens is not None else None) or ()
    special |= {f"k{k}": value for k, value in enumerate(radial, start=1)}
    tangential = (module.lens.tangential if module.lens is not None else None) or ()
    special |= {f"p{k}": value for k, value in enumerate(tangential, start=1)}
    numbers = {}
    uncertainty = module.uncertainty
    for name, sigma in zip(uncertainty.parameters, uncertainty.sigma, strict=True) if uncertainty else ():
        block, field = name.split(".", 1)
        value = document[block].get(field)
        numbers[name] = {"value": special.get(field) if value is None else value, "sigma": sigma}
    return numbers


def summary(result: CalibrationResult) -> dict[str, Any]:
    """Plain numbers with units in their names, deviations beside them, and the findings."""
    module, contrast, defects = result.module, result.module.contrast, result.module.defects
    used = [view for view in result.views if view.board is not None]
    lattice = module.colour_from_event.lattice if module.colour_from_event is not None else None
    return {
        "module": module.name,
        "target": result.target.name,
        "views": len(result.views),
        "views_with_board": len(used),
        "blink_hz": {"value": result.blink.hz, "sigma": result.blink.sigma_hz},
        "flicker_hz": list(result.blink.flicker_hz),
        "mirror_x": module.event_grid.mirror_x,
        "mirror_y": module.event_grid.mirror_y,
        "clear_site": module.cluster.clear_site,
        "centroid_px": module.colour_from_event.centroid if module.colour_from_event is not None else None,
        "lattice_p_value": lattice.p_value if lattice is not None else None,
        "lens_model": module.lens.model if module.lens is not None else None,
        "corner_rms_px": result.lens_fit.rms_px,
        "numbers": numbers_of(module),
        "on_spread": contrast.on_spread if contrast is not None else None,
        "off_spread": contrast.off_spread if contrast is not None else None,
        "refractory_lower_bound_ns": contrast.refractory_ns if contrast is not None else None,
        "hot_pixels": len(defects.hot) if defects is not None else None,
        "dead_pixels": len(defects.dead) if defects is not None else None,
        "findings": list(result.findings),
    }
