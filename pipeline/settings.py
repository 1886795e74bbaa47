"""Settings: every one with its default, unit, meaning and the stage whose rows it decides.

Precedence: option, environment (LATTICE_CENSUS_NAME), settings file, what the store holds, default.
"""

from __future__ import annotations

import difflib
import json
import os
import tomllib
from collections.abc import Mapping
from pathlib import Path
from typing import Any, Literal

from pydantic import BaseModel, ConfigDict, Field, ValidationError, ValidationInfo, field_validator

from .errors import UsageError
from .tolerances import Tolerances

STAGES = ("parse", "canonical", "fingerprint", "verify", "keep")
_T = Tolerances()

EnergyUnit = Literal["eV", "eV/site", "Ha", "Ry", "kJ/mol"]


def _setting(default: Any, meaning: str, stage: str | None = None, **limits: Any) -> Any:
    return Field(default=default, description=meaning, json_schema_extra={"stage": stage}, **limits)


KeepRule = Literal["theory", "energy", "symmetry", "sites", "date", "source"]


class SourceSettings(BaseModel):
    """Where a source's table or comment line keeps what; in a settings file under [sources.NAME]."""

    model_config = ConfigDict(frozen=True, extra="forbid")

    id_column: str | None = Field(None, description="Column of the label.")
    structure_column: str | None = Field(None, description="Column of the structure text.")
    energy_column: str | None = Field(None, description="Column or key of the energy.")
    energy_unit: EnergyUnit | None = Field(
        None, description="Unit of the energy: eV, Ha, Ry and kJ/mol for the whole given cell, eV/site per site."
    )
    theory: str | None = Field(None, description="Level of theory of all records.")
    theory_column: str | None = Field(None, description="Column or key of the level of theory.")
    split_column: str | None = Field(None, description="Column or key of the set (train, test ...).")
    date_column: str | None = Field(None, description="Column or key of the record's own date (ISO 8601).")


class Settings(BaseModel):
    """All settings of a run. Frozen; unknown names are refused."""

    model_config = ConfigDict(frozen=True, extra="forbid")

    max_sites: int = _setting(1000, "Most sites a structure may have.", "parse", ge=1, le=4000)
    max_text_bytes: int = _setting(20_000_000, "Longest structure text, bytes.", "parse", ge=1000)

    exact_tolerance: float = _setting(
        _T.exact_tolerance, "Exact translations: site to mean of its images, angstrom.", "canonical", gt=0, le=0.02
    )
    primitive_tolerance: float = _setting(
        _T.primitive_tolerance,
        "Approximate translations: site to mean of its images, angstrom.",
        "canonical",
        gt=0,
        le=0.1,
    )
    overlap_distance: float = _setting(
        _T.overlap_distance, "Sites closer than this are refused, angstrom.", "parse", ge=0.2, le=2
    )
    symmetry_tolerance: float = _setting(
        _T.symmetry_tolerance, "Distance for the space group, angstrom.", "canonical", gt=0, le=0.5
    )
    lattice_strain_tolerance: float = _setting(
        _T.lattice_strain_tolerance,
        "Strain within which a lattice counts as a higher type.",
        "canonical",
        gt=0,
        le=0.05,
    )

    fingerprint_k: int = _setting(64, "Neighbours in a distance distribution.", "fingerprint", ge=8, le=256)

    same_shift: float = _setting(_T.same_shift, "Grade same: largest shift, angstrom.", "verify", gt=0)
    same_strain: float = _setting(_T.same_strain, "Grade same: strain.", "verify", gt=0)
    near_shift: float = _setting(_T.near_shift, "Grade near: largest shift, angstrom.", "verify", gt=0, le=0.3)
    near_strain: float = _setting(_T.near_strain, "Grade near: strain.", "verify", gt=0, le=0.05)
    rescaled_volume_ratio: float = _setting(
        _T.rescaled_volume_ratio, "Grade rescaled: volume ratio per site.", "verify", ge=1, le=3
    )
    isotypic_shift: float = _setting(
        _T.isotypic_shift, "Grade isotypic: largest shift, in (volume per site)^(1/3).", "verify", gt=0, le=0.1
    )
    isotypic_shape_strain: float = _setting(
        _T.isotypic_shape_strain, "Grade isotypic: shape strain.", "verify", gt=0, le=0.05
    )
    window_factor: float = _setting(
        _T.window_factor, "Pairs up to this many times the near limits are verified and kept.", "verify", ge=1, le=3
    )
    mirror_images: Literal["merge", "separate"] = _setting(
        "merge", "Mirror images are one crystal (merge) or two (separate).", "verify"
    )
    matches_per_record: int = _setting(32, "Closest matches kept of each record.", "verify", ge=1, le=1000)

    keep_rules: tuple[KeepRule, ...] = _setting(
        ("theory", "energy", "symmetry", "sites", "date", "source"),
        "What makes a record the kept one, in order; last comes the record id.",
        "keep",
    )
    theory_preference: tuple[str, ...] = _setting((), "Levels of theory, best first.", "keep")
    source_preference: tuple[str, ...] = _setting((), "Sources, best first.", "keep")
    energy_conflict_ev_per_site: float = _setting(
        0.005, "Energies of one theory in a group that differ by more are a conflict, eV per site.", "keep", gt=0
    )

    chunk_records: int = _setting(2000, "Records in a chunk of work.", ge=1, le=100_000)
    workers: int = _setting(0, "Worker processes; 0: one a core.", ge=0, le=256)
    engine: Literal["processes", "dask"] = _setting(
        "processes", "Who does the work: processes of this machine, or workers of a Dask scheduler."
    )
    scheduler: str = _setting("", "Address of the Dask scheduler; without one, workers are started on this machine.")
    parts: str = _setting("", "Folder or URL that every worker sees, for parts; without one, the work folder.")
    orchestrator: Literal["prefect", "direct"] = _setting(
        "prefect", "Run as Prefect flows, or the same functions directly."
    )
    sources: dict[str, SourceSettings] = Field(
        default_factory=dict, description="Settings of single sources by name.", json_schema_extra={"stage": None}
    )

    @field_validator("keep_rules", "theory_preference", "source_preference", mode="before")
    @classmethod
    def _words(cls, value: Any) -> Any:
        """A text with commas, as an environment variable or option gives it, is a list."""
        if isinstance(value, str):
            return [word.strip() for word in value.split(",") if word.strip()]
        return value

    @field_validator("scheduler")
    @classmethod
    def _of_dask(cls, value: str, info: ValidationInfo) -> str:
        if value and info.data.get("engine") != "dask":
            raise ValueError("a scheduler is used with engine = dask alone")
        return value

    @field_validator("keep_rules", "theory_preference", "source_preference")
    @classmethod
    def _once(cls, value: tuple[str, ...]) -> tuple[str, ...]:
        if len(set(value)) != len(value):
            raise ValueError("a word stands twice")
        return value

    @property
    def tolerances(self) -> Tolerances:
        """The thresholds among the settings."""
        return Tolerances(**{name: getattr(self, name) for name in Tolerances.__dataclass_fields__})

    @property
    def worker_count(self) -> int:
        """Number of worker processes."""
        if self.workers:
            return self.workers
        if hasattr(os, "sched_getaffinity"):
            return len(os.sched_getaffinity(0))
        return os.cpu_count() or 1

    def of_stage(self, stage: str) -> dict[str, Any]:
        """Names and values of the settings that decide the rows of a stage."""
        values = self.model_dump(mode="json")
        return {name: values[name] for name in Settings.model_fields if stage_of(name) == stage}


def stage_of(name: str) -> str | None:
    """The stage whose rows a setting decides; None where it changes no result."""
    extra = Settings.model_fields[name].json_schema_extra
    stage = extra.get("stage") if isinstance(extra, dict) else None
    return stage if isinstance(stage, str) else None


def read_settings_file(path: Path) -> dict[str, Any]:
    """The content of a TOML settings file; UsageError where it cannot be read."""
    try:
        return tomllib.loads(path.read_text(encoding="utf-8"))
    except OSError as error:
        raise UsageError(f"The settings file {path} cannot be read: {error.strerror}.") from error
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise UsageError(f"The settings file {path} is not TOML: {error}.") from error


def _from_environment(environment: Mapping[str, str]) -> dict[str, Any]:
    prefix = "LATTICE_CENSUS_"
    found: dict[str, Any] = {}
    for variable in sorted(environment):
        if not variable.startswith(prefix):
            continue
        name = variable.removeprefix(prefix).lower()
        if name in ("store", "settings", "debug"):  # read by the commands
            continue
        if name == "sources" or name not in Settings.model_fields:
            close = difflib.get_close_matches(name, Settings.model_fields, n=1)
            hint = f" Did you mean {prefix}{close[0].upper()}?" if close else " Unset it."
            raise UsageError(f"The environment variable {variable} names no setting.{hint}")
        found[name] = environment[variable]
    return found


def resolve_settings(
    options: Mapping[str, Any] | None = None,
    environment: Mapping[str, str] | None = None,
    file: Path | None = None,
    stored: Mapping[str, Any] | None = None,
) -> Settings:
    """The settings in force, by the precedence of this module. Raises UsageError naming the setting and the limit."""
    given = (
        ("the store", dict(stored or {})),
        (str(file), read_settings_file(file) if file is not None else {}),
        ("the environment", _from_environment(os.environ if environment is None else environment)),
        ("an option", {k: v for k, v in (options or {}).items() if v is not None}),
    )
    merged: dict[str, Any] = {}
    origins: dict[str, str] = {}
    for origin, values in given:
        merged.update(values)
        origins.update(dict.fromkeys(values, origin))
    try:
        return Settings.model_validate(merged)
    except ValidationError as error:
        lines = [_complaint(e["loc"], e["type"], e["msg"], e["input"], origins) for e in error.errors()]
        raise UsageError("These settings cannot be used:\n" + "\n".join(lines)) from error


def _complaint(loc: tuple[int | str, ...], kind: str, message: str, value: Any, origins: Mapping[str, str]) -> str:
    """One line: which setting, from where, what is wrong with it."""
    where = ".".join(str(part) for part in loc)
    origin = origins.get(str(loc[0]), "an option")
    if kind == "extra_forbidden":
        known = Settings.model_fields if len(loc) == 1 else SourceSettings.model_fields
        close = difflib.get_close_matches(str(loc[-1]), known, n=1)
        hint = f"; did you mean {close[0]}?" if close else ""
        return f"  {where} (from {origin}): there is no such setting{hint}"
    if kind in ("model_type", "model_attributes_type", "dict_type"):
        message = "Input should be a table of settings"
    return f"  {where} (from {origin}): {message} (given: {json.dumps(value, default=str)})"
