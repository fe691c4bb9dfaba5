"""From YAML files to models and back: briefs, plans, sites, rigs, and the errors that say what is wrong with them."""

from __future__ import annotations

import json
from datetime import UTC, date, datetime, time
from difflib import get_close_matches
from pathlib import Path
from types import UnionType
from typing import TYPE_CHECKING, Annotated, Any, TypeVar, Union, get_args, get_origin

from pydantic import BaseModel, ValidationError

from planner.errors import DocumentError, InputError
from planner.events.family import EventSpec
from planner.events.orbit import ELEMENTS, Orbit, orbit_from_elements
from planner.events.orbitfile import orbit_from_spk, read_orbit_line
from planner.sequence import strictyaml
from planner.sequence.models import (
    Brief,
    ElementSigma,
    EventRequest,
    LimbFiles,
    OrbitElements,
    OrbitFile,
    Plan,
    Rig,
    Site,
)
from planner.sky.observer import Observer

if TYPE_CHECKING:
    from planner.sky.moonlimb import LimbModel

AnyModel = TypeVar("AnyModel", bound=BaseModel)

_LONGEST_FOUND = 60


def load_site(path: str | Path) -> Site:
    """Return the site in a YAML file; raises DocumentError."""
    return _as(Site, strictyaml.read(path))


def load_rig(path: str | Path) -> Rig:
    """Return the rig in a YAML file, with whole paths to the files it names, and to a lens kept beside it.

    Those count from the rig's folder and may not leave it. Raises DocumentError.
    """
    document = strictyaml.read(path)
    if isinstance(document.data, dict):
        _resolve_rig_files(document, ())
        kept = lens_path(Path(path))
        if "lens" not in document.data and kept.is_file():
            document.data["lens"] = str(kept.resolve())
    return _as(Rig, document)


def lens_path(rig_path: Path) -> Path:
    """Return where the lens learned of a rig file is kept, unless the rig names another place."""
    return rig_path.with_name(rig_path.stem + ".lens.yaml")


def _resolve_rig_files(document: strictyaml.Document, key: strictyaml.Key) -> None:
    """Put whole paths in place of those of the files that a rig names, the rig being at this key of a document."""
    rig = document.data
    for part in key:
        rig = rig[part]
    for name in ("lens", "catalogue"):
        if isinstance(rig.get(name), str):
            rig[name] = str(_inside(document, (*key, name)).resolve())


def load_plan(path: str | Path) -> Plan:
    """Return the plan in a YAML file; raises DocumentError."""
    return _as(Plan, strictyaml.read(path))


def load_brief(path: str | Path, site: Site | None = None, rig: Rig | None = None) -> Brief:
    """Return the brief in a YAML file with the site and the rigs it names put in place of their paths.

    Paths count from the brief's folder and may not leave it; `site` and `rig`, which the caller may have loaded
    from anywhere, take the place of the brief's. Raises DocumentError naming file, line, key, found, allowed.
    """
    document = strictyaml.read(path)
    if isinstance(document.data, dict):
        for key, model, given in (("site", Site, site), ("rig", Rig, rig)):
            if given is not None:
                document.data[key] = given.model_dump(mode="json")
            elif isinstance(document.data.get(key), str):
                document.data[key] = _referred(document, (key,), model)
            elif key == "rig" and isinstance(document.data.get(key), dict):
                _resolve_rig_files(document, (key,))
        event = document.data.get("event")
        if isinstance(event, dict) and isinstance(event.get("orbit"), str):
            event["orbit"] = load_orbit(_inside(document, ("event", "orbit"))).model_dump(
                mode="json", exclude_unset=True
            )
        limb = event.get("limb") if isinstance(event, dict) else None
        for key in ("elevation", "orientation", "frame"):
            if isinstance(limb, dict) and isinstance(limb.get(key), str):
                limb[key] = str(_inside(document, ("event", "limb", key)).resolve())
        others = document.data.get("other_rigs")
        listed = others if isinstance(others, list) else []
        for index, entry in enumerate(listed):
            if isinstance(entry, str):
                listed[index] = _referred(document, ("other_rigs", index), Rig)
            elif isinstance(entry, dict):
                _resolve_rig_files(document, ("other_rigs", index))
    return _as(Brief, document)


def load_orbit(path: str | Path) -> OrbitElements | OrbitFile:
    """Return the orbit in a file: YAML or JSON of elements or of an SPK file's name, or one line of the orbit format.

    Raises DocumentError or InputError naming what is wrong.
    """
    path = Path(path)
    if path.suffix.lower() == ".bsp":
        raise InputError(
            f"{path}: found an SPK file, which says nothing of the body's size; allowed is a YAML file that names it "
            "(spk: FILE.bsp) with name and diameter_km"
        )
    if path.suffix.lower() not in (".yaml", ".yml", ".json"):
        orbit = read_orbit_line(path)
        assert orbit.elements is not None
        assert orbit.element_sigma is not None
        assert orbit.epoch_jd_tdb is not None
        return OrbitElements(
            name=orbit.name,
            epoch_jd_tdb=orbit.epoch_jd_tdb,
            **dict(zip(ELEMENTS, orbit.elements, strict=True)),
            sigma=ElementSigma(**dict(zip(ELEMENTS, orbit.element_sigma, strict=True))),
            absolute_magnitude=orbit.absolute_magnitude,
            slope=orbit.slope,
            diameter_km=orbit.diameter_km,
            diameter_sigma_km=orbit.diameter_sigma_km,
            source=f"{path.name}, {orbit.source}",
            notes=list(orbit.notes),
        )
    document = strictyaml.read(path)
    if not (isinstance(document.data, dict) and "spk" in document.data):
        return _as(OrbitElements, document)
    held = _as(OrbitFile, document)
    return held.model_copy(update={"spk": str((path.parent / held.spk).resolve())})


def orbit_of(given: OrbitElements | OrbitFile | str | None) -> Orbit | None:
    """Return an orbit as families understand it; raises InputError when it cannot be one."""
    if given is None:
        return None
    if isinstance(given, str):
        given = load_orbit(given)
    stated = (given.sigma_along_arcsec, given.sigma_across_arcsec)
    common: dict[str, Any] = {
        name: getattr(given, name)
        for name in ("absolute_magnitude", "slope", "diameter_km", "diameter_sigma_km", "source")
    }
    common["notes"] = tuple(given.notes)
    if stated != (None, None):
        along, across = (one if one is not None else other for one, other in (stated, stated[::-1]))
        common["sigma_arcsec"] = (along, across)
    if isinstance(given, OrbitFile):
        return orbit_from_spk(given.spk, given.spk_target, name=given.name, **common)
    sigma = None if given.sigma is None else tuple(getattr(given.sigma, name) for name in ELEMENTS)
    elements = tuple(getattr(given, name) for name in ELEMENTS)
    return orbit_from_elements(given.name, given.epoch_jd_tdb, elements, element_sigma=sigma, **common)


def observer_of(site: Site) -> Observer:
    """Return the observer who stands at a site."""
    return Observer(
        name=site.name,
        latitude_deg=site.latitude_deg,
        longitude_deg=site.longitude_deg,
        height_m=site.height_m,
        position_sigma_m=site.position_sigma_m,
        height_sigma_m=site.height_sigma_m,
        pressure_hpa=site.pressure_hpa,
        temperature_c=site.temperature_c,
        horizon=tuple(site.horizon),
        timezone=site.timezone,
    )


def event_spec(request: EventRequest) -> EventSpec:
    """Return the event asked for as families understand it; a date without a time means noon UTC."""
    from planner.sky.timescale import tt_s_from_datetime

    moment = request.date
    if not isinstance(moment, datetime):
        moment = datetime.combine(moment, time(12), tzinfo=UTC)
    return EventSpec(
        family=request.family,
        body=request.body,
        date_tt_s=float(tt_s_from_datetime(moment)),
        other_body=request.other_body,
        star=request.star,
        orbit=orbit_of(request.orbit),
        limb=_limb_of(request.limb),
        radii=request.radii,
    )


def _limb_of(files: LimbFiles | None) -> LimbModel | None:
    if files is None:
        return None
    from planner.sky.moonlimb import limb_model

    return limb_model(files.elevation, files.orientation, files.frame)


def dump_plan(plan: Plan) -> str:
    """Return a plan as YAML: stable order, a line for each shot and each point, so that two plans diff well."""
    return strictyaml.dump(_tidy(plan, Plan))


def _referred(document: strictyaml.Document, key: strictyaml.Key, model: type[BaseModel]) -> dict[str, Any]:
    """Return the data of the file that a brief names, after it has been found right by itself."""
    path = _inside(document, key)
    loaded: BaseModel = load_rig(path) if model is Rig else _as(model, strictyaml.read(path))
    return loaded.model_dump(mode="json", exclude_unset=True)


def _inside(document: strictyaml.Document, key: strictyaml.Key) -> Path:
    """Return the path of a file that a document names, which must lie in the document's own folder."""
    name = document.data
    for part in key:
        name = name[part]
    folder = Path(document.path).parent
    line = document.line(key)
    where = strictyaml.dotted(key)
    if Path(name).is_absolute() or not (folder / name).resolve().is_relative_to(folder.resolve()):
        raise DocumentError(
            document.path,
            line,
            where,
            repr(name),
            f"a path may not leave the folder of {Path(document.path).name}; name it on the command line",
        )
    if not (folder / name).is_file():
        near = sorted(
            str(p.relative_to(folder)) for each in ("*.yaml", "*/*.yaml") for p in folder.glob(each)
        )
        raise DocumentError(
            document.path,
            line,
            where,
            repr(name),
            f"no such file in the folder of {Path(document.path).name}" + _did_you_mean(name, near),
        )
    return folder / name


def _as(model: type[AnyModel], document: strictyaml.Document) -> AnyModel:
    """Return a document as a model; the first thing wrong becomes a DocumentError."""
    if not isinstance(document.data, dict):
        found = "nothing" if document.data is None else _shown(document.data)
        raise DocumentError(
            document.path,
            document.line(()),
            "(document)",
            found,
            f"a {model.__name__.lower()} with its keys is needed",
        )
    try:
        # JSON is the strict mode in which text may become a moment, but not a number or a truth value
        return model.model_validate_json(json.dumps(document.data), strict=True)
    except ValidationError as invalid:
        raise _document_error(model, document, invalid) from None


def _document_error(
    model: type[BaseModel], document: strictyaml.Document, invalid: ValidationError
) -> DocumentError:
    found_errors = [
        (*_place(document.data, error["loc"]), error)
        for error in invalid.errors(include_url=False, include_context=True)
    ]
    # a mapping where a path is allowed too also fails as text, which is not what is wrong with it
    found_errors = [
        item for item in found_errors if not (item[2]["type"] == "string_type" and isinstance(item[1], dict))
    ] or found_errors
    key, value, error = min(
        found_errors, key=lambda item: (item[2]["type"] == "missing", document.line(item[0]) or 0)
    )
    siblings = _model_at(model, key[:-1])
    fields = siblings.model_fields if siblings else {}
    name = str(key[-1]) if key else ""
    kind = error["type"]
    if kind == "missing":
        description = fields[name].description if name in fields else None
        found, allowed = "nothing", "this key is needed" + (f": {description}" if description else "")
        rivals = [str(k) for k in _unknown(document.data, key[:-1], fields)]
        close = get_close_matches(name, rivals, n=1)
        allowed += f" (is {close[0]!r} meant for it?)" if close else ""
    elif kind == "extra_forbidden":
        found = "this key, which is unknown"
        elsewhere = _homes(model, name)
        close_text = _did_you_mean(name, list(fields))
        allowed = (
            "allowed are "
            + ", ".join(fields)
            + (close_text or (f"; {name!r} belongs to {elsewhere[0]}" if elsewhere else ""))
        )
    else:
        same_key = [item for item in found_errors if item[0] == key]
        found = _shown(value)
        wishes = dict.fromkeys(_wish(item[2]) for item in same_key)
        allowed = " or ".join(wishes)
        if kind == "literal_error" and isinstance(value, str):
            allowed += _did_you_mean(value, [str(v) for v in _literals(error)])
        if name in fields and fields[name].description:
            allowed += f" ({fields[name].description})"
    others = len({item[0] for item in found_errors}) - 1
    if others:
        allowed += f" [and {others} more to put right]"
    return DocumentError(document.path, document.line(key), strictyaml.dotted(key), found, allowed)


def _place(data: Any, loc: tuple[str | int, ...]) -> tuple[strictyaml.Key, Any]:
    """Return the key path of a pydantic location without the union tags in it, and the value found there."""
    key: list[str | int] = []
    for index, part in enumerate(loc):
        if (isinstance(data, dict) and part in data) or (isinstance(data, list) and isinstance(part, int)):
            key.append(part)
            data = data[part]  # type: ignore[index]
        elif (
            index == len(loc) - 1 and isinstance(data, dict) and isinstance(part, str) and part.isidentifier()
        ):
            key.append(part)
            data = None
    return tuple(key), data


def _wish(error: Any) -> str:
    """Return what a pydantic error asks for, in our words where we have better ones."""
    kind = error["type"]
    if kind.startswith("timezone") or kind == "timezone_aware":
        return "a time needs Z or an offset, such as 2032-11-13T06:41:12Z"
    if kind.startswith("datetime"):
        return "an ISO 8601 time with Z or an offset is needed, such as 2032-11-13T06:41:12Z"
    if kind.startswith("date"):
        return "a date is needed, such as 2032-11-13"
    if kind == "bool_type":
        return "true or false is needed"
    if kind in ("float_type", "int_type"):
        return "a number is needed, without quotes"
    if kind == "string_type":
        return "text is needed"
    if kind == "model_type":
        return "a mapping of keys to values is needed"
    if kind == "literal_error":
        return "allowed are " + ", ".join(str(v) for v in _literals(error))
    return str(error["msg"]).replace("Input should", "should").replace("Value error, ", "")


def _literals(error: Any) -> list[str]:
    text = error.get("ctx", {}).get("expected", "")
    return [part.strip().strip("'") for part in text.replace(" or ", ", ").split(",") if part.strip()]


def _shown(value: Any) -> str:
    text = "a mapping" if isinstance(value, dict) else "a list" if isinstance(value, list) else repr(value)
    text = {"None": "nothing", "True": "true", "False": "false"}.get(text, text)
    return text if len(text) <= _LONGEST_FOUND else text[:_LONGEST_FOUND] + "…"


def _did_you_mean(name: str, allowed: list[str]) -> str:
    close = get_close_matches(name, allowed, n=1, cutoff=0.5)
    return f"; did you mean {close[0]!r}?" if close else ""


def _unknown(data: Any, key: strictyaml.Key, fields: dict[str, Any]) -> list[str]:
    for part in key:
        data = data[part]
    return [name for name in data if name not in fields] if isinstance(data, dict) else []


def _models_in(annotation: Any) -> list[type[BaseModel]]:
    """Return the models that an annotation may hold: alone, optional, in unions or lists."""
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return [annotation]
    if get_origin(annotation) in (Union, UnionType, list, tuple, Annotated):
        return [model for part in get_args(annotation) for model in _models_in(part)]
    return []


def _model_at(model: type[BaseModel], key: strictyaml.Key) -> type[BaseModel] | None:
    for part in key:
        if isinstance(part, int):
            continue
        field = model.model_fields.get(part)
        inside = _models_in(field.annotation) if field else []
        if not inside:
            return None
        model = inside[0]
    return model


def _homes(model: type[BaseModel], name: str, prefix: str = "") -> list[str]:
    """Return where in a document a key of this name belongs."""
    found = [prefix + name] if prefix and name in model.model_fields else []
    for field_name, field in model.model_fields.items():
        for inside in _models_in(field.annotation):
            found += _homes(inside, name, f"{prefix}{field_name}.")
    return found


def _tidy(value: Any, kind: Any = None) -> Any:
    """Return a model as plain data in field order, without keys left at their defaults in site, rig and shots."""
    if isinstance(value, BaseModel):
        fields = type(value).model_fields
        plain = {
            name: _tidy(getattr(value, name))
            for name, field in fields.items()
            if field.is_required() or getattr(value, name) != field.get_default(call_default_factory=True)
        }
        if isinstance(value, Plan):
            plain = {"format": value.format, **plain}
        leaf = not any(isinstance(item, dict | list) for item in plain.values())
        return strictyaml.OneLine(plain) if leaf and type(value).__name__ in _ONE_LINE else plain
    if isinstance(value, datetime):
        return moment_text(value)
    if isinstance(value, date):
        return value.isoformat()
    if isinstance(value, dict):
        return {str(name): _tidy(item) for name, item in value.items()}
    if isinstance(value, list | tuple):
        items = [_tidy(item) for item in value]
        plain_row = all(isinstance(item, str | int | float | strictyaml.Row) for item in items)
        return strictyaml.Row(items) if plain_row and not any(isinstance(i, str) for i in items) else items
    if isinstance(value, str | int | float | bool) or value is None:
        return value
    raise InputError(f"cannot be written as YAML: {type(value).__name__}")


_ONE_LINE = {"Shot", "PredictedPoint", "EventRequest", "Filter", "GainSetting", "CalibrationSet", "Step"}


def moment_text(moment: datetime) -> str:
    """Return an aware moment as ISO 8601 in UTC with `Z`, with milliseconds, or microseconds where needed."""
    spec = "microseconds" if moment.microsecond % 1000 else "milliseconds"
    return moment.astimezone(UTC).replace(tzinfo=None).isoformat(timespec=spec) + "Z"
