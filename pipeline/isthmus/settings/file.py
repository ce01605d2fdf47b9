"""Settings from a TOML file, what is wrong with them in words, and settings as a TOML file.

Relative paths are taken from the folder of the configuration file, because a scheduler's current folder is
nobody's intention.
"""

from __future__ import annotations

import difflib
import json
import os
import tomllib
from collections.abc import Iterator
from pathlib import Path
from typing import Any, TypeVar

from pydantic import ValidationError
from pydantic.fields import FieldInfo

from isthmus.errors import SettingsError, StoreError
from isthmus.settings.kinds import KINDS, kind_of
from isthmus.settings.models import Run, Settings, masked
from isthmus.settings.section import Section, files_of

__all__ = ["load", "load_all", "to_toml"]

AnySection = TypeVar("AnySection", bound=Section)


# What a definition may hold otherwise: nothing that makes the log read otherwise, or elsewhere.
DEFINABLE = ("window", "ties", "graph", "score", "gates")


def load_all(path: str | Path) -> list[Settings]:
    """The settings of every series that a configuration file defines: its own, then one for each of `definitions`.

    Raises what `load` raises.
    """
    path = Path(path)
    raw = _read(path)
    own = _validated(path, raw)
    others = []
    for name, told in own.definitions.items():
        if unknown := [section for section in told if section not in DEFINABLE]:
            raise SettingsError(
                f"settings {path}:\n  definitions.{name}.{unknown[0]}: a definition may differ in "
                f"{', '.join(DEFINABLE)} only"
            )
        merged = raw | {"series": f"{own.series}-{name}", "definitions": {}}
        merged |= {section: raw.get(section, {}) | keys for section, keys in told.items()}
        if metrics := own.signals.prometheus:  # each series tells its own
            merged["signals"] = raw["signals"] | {"prometheus": f"{metrics.removesuffix('.prom')}-{name}.prom"}
        others.append(_validated(path, merged, f"definitions.{name}: "))
    return [own, *others]


def load(path: str | Path) -> Settings:
    """Read a configuration file, without the further series that it may define.

    Relative paths (of log, warehouse, work folder and signals) come back resolved against the file's folder.

    Raises SettingsError (unknown key, wrong type, impossible value, not TOML) and StoreError (no such file).
    """
    return _validated(Path(path), _read(Path(path)))


def _read(path: Path) -> dict[str, Any]:
    try:
        return tomllib.loads(path.read_text(encoding="utf-8"))
    except OSError as error:
        raise StoreError(f"cannot read settings {path}: {error.strerror}; give the path of a TOML file") from None
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise SettingsError(f"{path} is not TOML: {error}; mend that line") from None


def _validated(path: Path, raw: dict[str, Any], of: str = "") -> Settings:
    """The settings with their files resolved. `of`: said before what is wrong with them."""
    try:
        settings = Settings.model_validate(raw)
    except ValidationError as error:
        raise SettingsError(_explain(path, error, kind_of(raw.get("log", {})), of)) from None
    home = path.resolve().parent
    run = settings.run.model_copy(
        update={key: _resolve(home, getattr(settings.run, key)) for key in ("warehouse", "work")}
    )
    log = _with_files(settings.log, home)
    privacy = _with_files(settings.privacy, home)
    files = {key: value for key, value in settings.signals if value and (key, value) != ("log", "-")}
    signals = settings.signals.model_copy(update={key: _resolve(home, value) for key, value in files.items()})
    _apart(path, log.path, run)
    return settings.model_copy(update={"run": run, "log": log, "privacy": privacy, "signals": signals})


def _apart(path: Path, log: str, run: Run) -> None:
    """Raise SettingsError when what is written would be read as a log, or both folders are one."""
    warehouse, work = Path(run.warehouse).resolve(), Path(run.work).resolve()  # a URL is below no folder
    if warehouse == work:
        raise SettingsError(
            f"settings {path}:\n  run.warehouse and run.work are both {warehouse}; readers must not see work"
        )
    for key, folder in (("run.warehouse", warehouse), ("run.work", work)):
        if folder.is_relative_to(Path(log).resolve()):
            raise SettingsError(
                f"settings {path}:\n  {key} = {folder} lies inside log.path = {log}, so it would be read "
                "as a log; name a folder outside"
            )


def _with_files(section: AnySection, home: Path) -> AnySection:
    """The section with the files that its keys name resolved, in its inner sections too."""
    update: dict[str, object] = {}
    for name, value in section:
        if isinstance(value, Section):
            update[name] = _with_files(value, home)
        elif value and name in files_of(section):
            update[name] = _resolve(home, value)
    return section.model_copy(update=update)


def _resolve(home: Path, text: str) -> str:
    return text if "://" in text else str(home / os.path.expanduser(text))


def _explain(path: Path, error: ValidationError, kind: str, of: str) -> str:
    """One line per fault: the key's path, the value, and what would be right."""
    lines = []
    for fault in error.errors():
        where = [str(step) for step in fault["loc"]]
        if where[:1] == ["log"]:
            del where[1:2]  # the kind
        key = ".".join(where) or "settings"
        given = "" if where[:1] == ["privacy"] else f" = {_show(fault['input'])}"  # which may be the secret itself
        if fault["type"] == "extra_forbidden":
            known = list(_section(where[:-1], kind).model_fields)
            others = [other for other in KINDS if where[0] == "log" and _knows(where, other)]
            near = difflib.get_close_matches(where[-1], known, n=1, cutoff=0.5)
            hint = f"did you mean {near[0]}?" if near else f"known here: {', '.join(known)}"
            if others:
                told = " or ".join(f'"{other}"' for other in others)
                hint = f'it belongs to log.kind = {told}, but the kind of this log is "{kind}"'
            lines.append(f"{key}{given}: unknown key; {hint}")
        elif fault["type"] == "missing":
            lines.append(f"{key}: missing; {_wanted(where, kind)}")
        elif fault["type"] == "model_type":
            lines.append(f"{key}{given}: a section, not a value; write it as [{key}]")
        elif fault["type"] == "union_tag_invalid":
            lines.append(f'log.kind = "{kind}": not known; one of {", ".join(KINDS)}')
        elif fault["type"] == "value_error":
            lines.append(str(fault["ctx"]["error"]))
        else:
            hint = _meaning(where, kind)
            lines.append(f"{key}{given}: {_lower(fault['msg'])}" + (f" ({hint})" if hint else ""))
    return f"settings {path}:\n" + "\n".join(f"  {of}{line}" for line in lines)


def _section(steps: list[str], kind: str) -> type[Section]:
    section: type[Section] = Settings
    for step in steps:
        told = section.model_fields[step].annotation
        section = KINDS[kind] if step == "log" else told  # type: ignore[assignment]
    return section


def _knows(steps: list[str], kind: str) -> bool:
    try:
        return steps[-1] in _section(steps[:-1], kind).model_fields
    except (KeyError, AttributeError):
        return False


def _wanted(steps: list[str], kind: str) -> str:
    """What a key that is missing means; of a section, which keys it must have."""
    section = _section(steps[:-1], kind).model_fields[steps[-1]].annotation
    if steps != ["log"] and isinstance(section, type) and issubclass(section, Section):
        keys = [name for name, field in section.model_fields.items() if field.is_required()]
        return f"write [{'.'.join(steps)}] with {' and '.join(keys)}"
    return _meaning(steps, kind)


def _meaning(steps: list[str], kind: str) -> str:
    try:
        field = _section(steps[:-1], kind).model_fields[steps[-1]]
        section = KINDS[kind] if steps == ["log"] else field.annotation
        return field.description or (section.__doc__ or "").strip()
    except (KeyError, AttributeError, IndexError):
        return ""


def _lower(message: str) -> str:
    return message[:1].lower() + message[1:]


def _show(value: object) -> str:
    text = masked(json.dumps(value, default=str, ensure_ascii=False))
    return text if len(text) <= 80 else text[:77] + "..."


def to_toml(settings: Settings) -> str:
    """The settings as a TOML file with every key, its unit, default and meaning as a comment."""
    lines: list[str] = []
    _write_section(settings, "", lines)
    return "\n".join(lines).strip() + "\n"


def _write_section(section: Section, name: str, lines: list[str]) -> None:
    if name:
        lines += ["", f"# {(type(section).__doc__ or '').strip()}", f"[{name}]"]
    inner: list[tuple[str, Section]] = []
    further: list[str] = []
    for key, field in type(section).model_fields.items():
        value = getattr(section, key)
        if isinstance(value, Section):
            inner.append((f"{name}.{key}" if name else key, value))
        elif isinstance(value, dict):
            further += ["", f"# {_comment(field)}", *_tables(key, value)]
        else:
            lines.append(f"# {_comment(field)}")
            lines.append(f"{key} = {json.dumps(value, ensure_ascii=False)}")
    for path, value in inner:
        _write_section(value, path, lines)
    lines += further


def _tables(name: str, told: dict[str, dict[str, Any]]) -> Iterator[str]:
    """Raw tables two levels deep, as TOML."""
    for one, sections in told.items():
        for section, keys in sections.items():
            yield f"[{name}.{one}.{section}]"
            yield from (f"{key} = {json.dumps(value, ensure_ascii=False)}" for key, value in keys.items())


def _comment(field: FieldInfo) -> str:
    extra = field.json_schema_extra
    unit = extra.get("unit") if isinstance(extra, dict) else ""
    default = "required" if field.is_required() else f"default {json.dumps(field.default, ensure_ascii=False)}"
    choices = getattr(field.annotation, "__args__", ())
    words = f"; one of {', '.join(choices)}" if choices and all(isinstance(c, str) for c in choices) else ""
    return f"{field.description} [{f'{unit}, ' if unit else ''}{default}{words}]"
