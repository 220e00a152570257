"""The settings file: one frozen model of all tables, every fault named at once.

``python -m latelight.config`` prints a settings file with every key, its default
and its meaning; ``configs/every_key.toml`` is that text.
"""

from __future__ import annotations

import difflib
import glob
import json
import os
import sys
import textwrap
import tomllib
from pathlib import Path
from typing import Any, Literal, get_args, get_origin

from pydantic import BaseModel, Field, ValidationError
from pydantic.fields import FieldInfo
from pydantic_core import ErrorDetails

from latelight.arcs.settings import ArcSettings
from latelight.errors import SettingsError
from latelight.frames.settings import FrameSettings, HeaderWords
from latelight.matching.settings import MatchingSettings
from latelight.motion.settings import MotionSettings
from latelight.motion.tracks.settings import TrackSettings
from latelight.motion.velocity_stack.settings import VelocityStackSettings
from latelight.night.settings import TEMPLATE_CHOICES, NightSettings, PairSettings
from latelight.origin.settings import OriginSettings, SourceSettings
from latelight.planning.settings import FieldSettings, LayerSettings, PlanSettings
from latelight.products.settings import ProductSettings
from latelight.registration.settings import RegistrationSettings
from latelight.settings import StageSettings
from latelight.stacking.settings import StackingSettings
from latelight.subtraction.settings import SubtractionSettings

__all__ = ["NightConfig", "describe_keys", "load_config"]


class NightConfig(StageSettings):
    """All tables of a settings file."""

    night: NightSettings
    header: HeaderWords = Field(default_factory=HeaderWords)
    frames: FrameSettings = Field(default_factory=FrameSettings)
    pairs: PairSettings = Field(default_factory=PairSettings)
    registration: RegistrationSettings = Field(default_factory=RegistrationSettings)
    matching: MatchingSettings = Field(default_factory=MatchingSettings)
    stacking: StackingSettings = Field(default_factory=StackingSettings)
    subtraction: SubtractionSettings = Field(default_factory=SubtractionSettings)
    arcs: ArcSettings = Field(default_factory=ArcSettings)
    motion: MotionSettings = Field(default_factory=MotionSettings)
    velocity_stack: VelocityStackSettings = Field(default_factory=VelocityStackSettings)
    tracks: TrackSettings = Field(default_factory=TrackSettings)
    origin: OriginSettings = Field(default_factory=OriginSettings)
    products: ProductSettings = Field(default_factory=ProductSettings)
    plan: PlanSettings = Field(default_factory=PlanSettings)
    sources: tuple[SourceSettings, ...] = ()
    fields: tuple[FieldSettings, ...] = ()
    layers: tuple[LayerSettings, ...] = ()


def load_config(path: Path) -> NightConfig:
    """Read a settings file and make its paths absolute.

    Parameters
    ----------
    path : Path
        A TOML file.

    Raises
    ------
    SettingsError
        If the file cannot be read, is not TOML, or has any wrong key or value:
        one line a fault, all of them.
    """
    data = _read_toml(path)
    try:
        # TOML's types are JSON's, but for dates, which no key takes: the strict
        # JSON rules accept 3 for 3.0 and an array for a tuple, and nothing else.
        config = NightConfig.model_validate_json(json.dumps(data, default=str))
    except ValidationError as error:
        raise SettingsError(path, _faults(error)) from None
    return _with_absolute_paths(config, path.resolve().parent)


def _read_toml(path: Path) -> dict[str, Any]:
    try:
        with path.open("rb") as stream:
            return tomllib.load(stream)
    except OSError as error:
        fault = f"cannot be read: {error.strerror}; give the path of a settings file"
    except UnicodeDecodeError as error:
        fault = (
            f"not UTF-8 text: {error.reason} at byte {error.start}; save it as UTF-8"
        )
    except tomllib.TOMLDecodeError as error:
        fault = f"not valid TOML: {error}; text needs quotes, one key a line"
    raise SettingsError(path, [fault])


def _with_absolute_paths(config: NightConfig, folder: Path) -> NightConfig:
    night = config.night.model_copy(
        update={
            # Signs in the folder's own name are no wildcards.
            "frames": tuple(
                os.path.join(glob.escape(str(folder)), pattern)  # noqa: PTH118
                for pattern in config.night.frames
            ),
            "output": os.path.normpath(folder / config.night.output),
        }
    )
    pairs, origin = config.pairs, config.origin
    if pairs.template not in TEMPLATE_CHOICES:
        pairs = pairs.model_copy(update={"template": str(folder / pairs.template)})
    if origin.source_table is not None:
        table = str(folder / origin.source_table)
        origin = origin.model_copy(update={"source_table": table})
    return config.model_copy(update={"night": night, "pairs": pairs, "origin": origin})


# --- faults ------------------------------------------------------------------


def _faults(error: ValidationError) -> list[str]:
    """Turn pydantic's errors into one line a key, in the order of the file."""
    grouped: dict[str, list[ErrorDetails]] = {}
    for detail in error.errors(include_url=False):
        grouped.setdefault(_dotted(detail["loc"]), []).append(detail)
    return [f"{key}: {_rule(details)}" for key, details in grouped.items()]


def _dotted(loc: tuple[int | str, ...]) -> str:
    """Return ``arcs.min_snr`` or ``sources[0].ra`` without the names of types."""
    known, _ = _walk(loc)
    text = ""
    for part in known:
        text += f"[{part}]" if isinstance(part, int) else f".{part}" if text else part
    return text or "the file"


def _walk(loc: tuple[int | str, ...]) -> tuple[tuple[int | str, ...], FieldInfo | None]:
    """Follow an error's location through the models.

    Returns the part of the location that is written in the file (an error in a
    union also carries the name of the type that was tried), and the field there.
    """
    model: type[BaseModel] | None = NightConfig
    found: FieldInfo | None = None
    for depth, part in enumerate(loc):
        if isinstance(part, int):
            continue
        if model is None:
            return loc[:depth], found
        found = model.model_fields.get(part)
        model = _model_of(found)
    return loc, found


def _model_of(info: FieldInfo | None) -> type[BaseModel] | None:
    """Return the settings model a field holds, alone or in an array."""
    if info is None:
        return None
    kinds = [info.annotation, *get_args(info.annotation)]
    for kind in kinds:
        if isinstance(kind, type) and issubclass(kind, BaseModel):
            return kind
    return None


_KINDS = {
    "bool_type": "true or false",
    "float_type": "a number",
    "int_type": "a whole number",
    "model_attributes_type": "a table",
    "model_type": "a table",
    "string_type": "text in quotes",
    "tuple_type": "an array in [ ]",
}


def _rule(details: list[ErrorDetails]) -> str:
    """Say which rule was broken, what was found, and how to mend it."""
    first = details[0]
    kind, value, context = first["type"], first["input"], first.get("ctx", {})
    if kind == "extra_forbidden":
        return _unknown_key(first["loc"])
    _, info = _walk(first["loc"])
    meaning = f" ({info.description.rstrip('.')})" if info and info.description else ""
    if kind == "missing":
        return f"missing{meaning}; add it"
    if kind == "value_error":
        return f"{context.get('error', first['msg'])}, got {_short(value)}"
    wanted = " or ".join(
        dict.fromkeys(_KINDS[d["type"]] for d in details if d["type"] in _KINDS)
    )
    if wanted:
        return f"must be {wanted}{meaning}, got {_short(value)}{_cure(kind, value)}"
    rule = first["msg"].removeprefix("Input ")
    return f"{rule}{meaning}, got {_short(value)}"


def _short(value: Any) -> str:
    """Return a value as written, cut when long."""
    text = json.dumps(value, ensure_ascii=False, default=str)
    return text if len(text) <= 60 else text[:57] + "..."


def _cure(kind: str, value: Any) -> str:
    """Say how a value of the wrong type is mended, where that can be told."""
    if kind not in {"float_type", "int_type"} or not isinstance(value, str):
        return ""
    for word in (value, *value.split()[:1]):
        try:
            number = float(word)
        except ValueError:
            continue
        text = f"{number:g}" if kind == "float_type" else f"{round(number)}"
        return f"; write {text}, without quotes or a unit, in the unit stated"
    return "; write a plain number without quotes"


def _unknown_key(loc: tuple[int | str, ...]) -> str:
    key = str(loc[-1])
    parent = NightConfig if len(loc) == 1 else _model_of(_walk(loc[:-1])[1])
    known = list(parent.model_fields) if parent is not None else []
    near = difflib.get_close_matches(key, known, n=1, cutoff=0.6)
    homes = [
        table
        for table, info in NightConfig.model_fields.items()
        if (model := _model_of(info)) is not None and key in model.model_fields
    ]
    if homes:
        return f"unknown key here; it belongs in [{homes[0]}]"
    if near:
        return f"unknown key; did you mean {near[0]!r}?"
    return f"unknown key; known here: {', '.join(known)}"


# --- the file of every key ---------------------------------------------------


def describe_keys() -> str:
    """Return a settings file that holds every key, its default and its meaning.

    Keys without a default stand as comments, but for the two that every file
    needs; so the text is itself a valid settings file.
    """
    lines = ["# Every key with its default. Only [night] must be given."]
    for table, info in NightConfig.model_fields.items():
        model = _model_of(info)
        if model is None:
            continue
        many = get_origin(info.annotation) is tuple
        lines += ["", f"# [[{table}]]" if many else f"[{table}]"]
        for key, entry in model.model_fields.items():
            lines += _describe_key(key, entry, commented=many)
    return "\n".join(lines) + "\n"


def _describe_key(key: str, info: FieldInfo, *, commented: bool) -> list[str]:
    default = info.get_default(call_default_factory=True)
    unset = default is None and not info.is_required()
    about = " ".join([_sentence(info.description or ""), *_limits(info)])
    if unset:
        about += " No default."
    comment = textwrap.wrap(about, 84, break_on_hyphens=False)
    value = info.examples[0] if info.examples else default
    known = not (unset or info.is_required()) or bool(info.examples)
    text = _toml_value(value) if known else "..."
    mute = "# " if commented or unset else ""
    return [*(f"# {line}" for line in comment), f"{mute}{key} = {text}"]


def _sentence(text: str) -> str:
    """Return a description as a sentence."""
    return f"{text[:1].upper()}{text[1:].rstrip('.')}."


def _limits(info: FieldInfo) -> list[str]:
    """Return the range or the choices of a key, in words."""
    choices = get_args(info.annotation)
    if get_origin(info.annotation) is Literal:
        return [f"One of {', '.join(choices)}."]
    words = {"gt": "above", "ge": "at least", "lt": "below", "le": "at most"}
    found = [
        f"{word} {limit:g}"
        for rule in info.metadata
        for sign, word in words.items()
        if (limit := getattr(rule, sign, None)) is not None
    ]
    return [_sentence(", ".join(found))] if found else []


def _toml_value(value: Any) -> str:
    if isinstance(value, (list, tuple)):
        return "[" + ", ".join(_toml_value(item) for item in value) + "]"
    # TOML's scalars are JSON's: true, 3, 0.5, "text".
    return json.dumps(value, ensure_ascii=False)


if __name__ == "__main__":
    sys.stdout.write(describe_keys())
