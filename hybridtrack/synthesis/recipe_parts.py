"""Parts that recipes of every kind share. Each is validated on reading, and refuses keys that it does not know."""

from pathlib import Path
from typing import Any

from pydantic import BaseModel, ConfigDict, Field, ValidationInfo, field_validator

from hybridtrack.module import HybridModule, Target, load_module, load_target, parse_module


class Strict(BaseModel):
    """A part of a recipe: frozen, without unknown keys, numbers finite."""

    model_config = ConfigDict(frozen=True, extra="forbid", allow_inf_nan=False)


def merged(base: dict[str, Any], overrides: dict[str, Any]) -> dict[str, Any]:
    """`base` with `overrides` laid over it, table by table."""
    result = dict(base)
    for key, value in overrides.items():
        old = result.get(key)
        result[key] = merged(old, value) if isinstance(old, dict) and isinstance(value, dict) else value
    return result


class FileSource(Strict):
    """A file, and values laid over what it says. A relative path counts from the recipe's folder."""

    file: Path
    overrides: dict[str, Any] = {}

    @field_validator("file")
    @classmethod
    def _beside_recipe(cls, path: Path, info: ValidationInfo) -> Path:
        folder = (info.context or {}).get("folder")
        return path if folder is None or path.is_absolute() else Path(folder) / path


class ModuleSource(FileSource):
    """The nominal module: what the recording says about itself."""

    def load(self) -> HybridModule:
        """Read the module. Raises MissingFileError or FileFormatError."""
        module = load_module(self.file)
        if not self.overrides:
            return module
        data = HybridModule.model_validate(merged(module.model_dump(), self.overrides))
        return parse_module(data.model_dump_json(), f"{self.file} with overrides")


class TargetSource(FileSource):
    """The blinking target."""

    def load(self) -> Target:
        """Read the target. Raises MissingFileError or FileFormatError."""
        target = load_target(self.file)
        return Target.model_validate(merged(target.model_dump(), self.overrides)) if self.overrides else target


class FrameRecipe(Strict):
    """Frame clock: rate, exposure and the stamp of the first frame."""

    rate_hz: float = Field(default=60.0, gt=0)
    exposure_ms: float = Field(default=4.0, gt=0)
    first_ms: float = 0.0
