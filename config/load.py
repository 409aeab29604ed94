"""Reading both configuration files, with every mistake of both at once."""

from __future__ import annotations

import difflib
import tomllib
from dataclasses import dataclass
from pathlib import Path
from typing import Any, TypeVar

from pydantic import BaseModel, ValidationError

from config.control_plan import Characteristic, ControlPlan, action_plan_text
from config.errors import ConfigurationError, Mistake
from config.settings import Settings
from config.values import house_unit

M = TypeVar("M", bound=BaseModel)


@dataclass(frozen=True)
class Bay:
    """A whole configuration: settings, control plan and where they were read from."""

    file: Path
    settings: Settings
    plan: ControlPlan

    @property
    def folder(self) -> Path:
        """Folder that relative paths are relative to."""
        return self.file.parent

    def path(self, relative: Path) -> Path:
        """Resolve a path of the settings."""
        return self.folder / relative

    @property
    def database_url(self) -> str:
        """Database URL with a relative SQLite file made absolute; without password."""
        url = self.settings.database.url
        prefix = "sqlite:///"
        if url.startswith(prefix) and url != "sqlite:///:memory:":
            return prefix + str((self.folder / url[len(prefix) :]).resolve())
        return url

    def action_plan(self, characteristic: Characteristic) -> str | None:
        """Text of the action plan of a characteristic."""
        return action_plan_text(characteristic, self.path(self.settings.bay.control_plan).parent)


def load_bay(file: Path) -> Bay:
    """Read `bay.toml` and the control plan it names.

    Raises
    ------
    ConfigurationError
        With every mistake of both files.
    """
    file = Path(file).absolute()
    mistakes: list[Mistake] = []
    raw = _read_toml(file, mistakes)
    settings = _validated(Settings, raw, file.name, mistakes) if raw is not None else None
    plan_name = _plan_name(raw)
    plan = None
    if plan_name is not None:
        plan_file = file.parent / plan_name
        raw_plan = _read_toml(plan_file, mistakes)
        if raw_plan is not None:
            plan = _validated(ControlPlan, raw_plan, plan_file.name, mistakes)
            if plan is not None:
                mistakes += _plan_mistakes(plan, plan_file)
    if mistakes or settings is None or plan is None:
        raise ConfigurationError(mistakes)
    return Bay(file, settings, plan)


def _plan_name(raw: dict[str, Any] | None) -> str | None:
    bay = (raw or {}).get("bay")
    name = bay.get("control_plan") if isinstance(bay, dict) else None
    return name if isinstance(name, str) else None


def _read_toml(file: Path, mistakes: list[Mistake]) -> dict[str, Any] | None:
    try:
        return tomllib.loads(file.read_text("utf-8-sig"))
    except FileNotFoundError:
        mend = "Give the file with --config, or write one; `yellowbay demo` makes an example."
        mistakes.append(Mistake(str(file), "(file)", None, "there is no such file", mend))
    except OSError as error:
        reason = f"cannot be read ({error.strerror})"
        mistakes.append(Mistake(str(file), "(file)", None, reason, "Mend its permissions."))
    except UnicodeDecodeError as error:
        reason = f"is not UTF-8 at byte {error.start}"
        mistakes.append(Mistake(str(file), "(file)", None, reason, "Save it as UTF-8."))
    except tomllib.TOMLDecodeError as error:
        mend = "Mend the TOML there; text needs quotes, lists need brackets."
        mistakes.append(Mistake(str(file), "(file)", None, f"is no TOML: {error}", mend))
    return None


def _validated(model: type[M], raw: dict[str, Any], file: str, mistakes: list[Mistake]) -> M | None:
    try:
        return model.model_validate(raw)
    except ValidationError as error:
        mistakes += [_mistake(model, dict(e), file, raw) for e in error.errors()]
        return None


def _mistake(model: type[BaseModel], error: dict[str, Any], file: str, raw: Any) -> Mistake:
    path = [part for part in error["loc"] if part != "[key]"]
    key = _dotted(path)
    kind, context = error["type"], error.get("ctx", {})
    if kind == "missing":
        return Mistake(file, key, None, "is missing", f"Add {path[-1]} = … there.")
    value = error.get("input")
    if kind == "extra_forbidden":
        near = difflib.get_close_matches(str(path[-1]), _legal_keys(model, path[:-1]), n=1)
        mend = f"Did you mean {near[0]}?" if near else "Take it out."
        return Mistake(file, key, value, "is no key known here", mend)
    if kind == "value_error":
        reason, _, mend = str(context.get("error", error["msg"])).partition("; ")
        return Mistake(file, key or "(file)", value, reason, _sentence(mend or "Mend the value"))
    if kind == "literal_error":
        expected = context["expected"]
        return Mistake(file, key, value, "is not allowed", f"Write one of {expected}.")
    return Mistake(file, key, value, error["msg"].lower(), _sentence(_mend_of_type(kind, context)))


def _mend_of_type(kind: str, context: dict[str, Any]) -> str:
    bounds = {"greater_than": "gt", "greater_than_equal": "ge", "less_than": "lt"}
    if kind in bounds or kind == "less_than_equal":
        return f"Write a number within the bound {context.get(bounds.get(kind, 'le'))}"
    for part, mend in (
        ("string", "Write text in quotes"),
        ("float", "Write a number without quotes"),
        ("int", "Write a whole number without quotes"),
        ("bool", "Write true or false"),
        ("tuple", "Write a list in brackets"),
        ("dict", "Write a table { key = value }"),
        ("model", "Write a table"),
        ("path", "Write a path in quotes"),
    ):
        if kind.startswith(part):
            return mend
    return "Mend the value"


def _sentence(text: str) -> str:
    text = text[:1].upper() + text[1:]
    return text if text.endswith((".", "?")) else text + "."


def _dotted(path: list[Any]) -> str:
    text = ""
    for part in path:
        text += f"[{part}]" if isinstance(part, int) else ("." if text else "") + str(part)
    return text


def _legal_keys(model: type[BaseModel], path: list[Any]) -> list[str]:
    """Keys that the models know anywhere on the way; enough for a good guess."""
    names: list[str] = []
    stack: list[Any] = [model]
    seen: set[Any] = set()
    while stack:
        current = stack.pop()
        if current in seen:
            continue
        seen.add(current)
        for name, field in current.model_fields.items():
            names.append(field.alias or name)
            stack += _models_in(field.annotation)
    return names


def _models_in(annotation: Any) -> list[type[BaseModel]]:
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return [annotation]
    return [m for part in getattr(annotation, "__args__", ()) for m in _models_in(part)]


def _plan_mistakes(plan: ControlPlan, file: Path) -> list[Mistake]:
    """What the models cannot see: missing action plans, parameters with two kinds of unit."""
    mistakes = []
    units: dict[str, tuple[str, str]] = {}
    for i, characteristic in enumerate(plan.characteristic):
        try:
            action_plan_text(characteristic, file.parent)
        except (OSError, UnicodeDecodeError):
            mend = "Write the file beside the control plan, or write the text itself here."
            key = f"characteristic[{i}].action_plan"
            reason = "names a file that cannot be read"
            mistakes.append(Mistake(file.name, key, characteristic.action_plan, reason, mend))
        base = house_unit(characteristic.unit)[0]
        first = units.setdefault(characteristic.parameter, (base, characteristic.unit))
        if first[0] != base:
            reason = f"does not go with {first[1]!r}, used for the same parameter before"
            mend = "Give both characteristics units that convert into each other."
            key = f"characteristic[{i}].unit"
            mistakes.append(Mistake(file.name, key, characteristic.unit, reason, mend))
        if characteristic.is_overlay and base != "nm":
            mend = "Write nm; the terms have units of their own (nm, ppm, urad)."
            key = f"characteristic[{i}].unit"
            mistakes.append(
                Mistake(file.name, key, characteristic.unit, "is no length for overlay", mend)
            )
    return mistakes
