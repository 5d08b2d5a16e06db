"""SigMF metadata: parsed, checked against the standard's own schema, and told in words if wrong."""

import copy
import functools
import itertools
import json

from chanbank._checks import wrong_type, wrong_value
from chanbank.recordings.datatype import GRAMMAR, Datatype
from chanbank.recordings.errors import RecordingError

__all__ = [
    "NAMESPACE",
    "entries",
    "extension_rows",
    "parse_metadata",
    "plain",
    "schema_version",
    "validate_metadata",
]

NAMESPACE = "chanbank"
_SECTIONS = ("global", "captures", "annotations")


def schema_version():
    """The version of the standard whose schema is used."""
    import sigmf

    return sigmf.__specification__


def parse_metadata(where, text, extensions=()):
    """The checked metadata in `text` (bytes); `where` names their place in messages.

    Unknown sections and entries are left alone, as the standard asks; an extension that is not
    optional must be one of `extensions`.
    """
    try:
        metadata = json.loads(text.decode("utf-8"), parse_constant=_not_json)
    except ValueError as error:
        raise RecordingError(f"{where}: found no JSON text in UTF-8: {error}") from None
    if not isinstance(metadata, dict):
        raise RecordingError(
            f"{where}: found a JSON {type(metadata).__name__}, expected one object"
        )
    name = metadata.get("global", {})
    name = name.get("core:datatype") if isinstance(name, dict) else None
    if isinstance(name, str):
        datatype = Datatype.parse(name)
        if datatype is None or datatype.bits == 24:
            raise RecordingError(f"{where}: unknown datatype: found {name!r}, expected {GRAMMAR}")
    validate_metadata(where, metadata)
    for extension in metadata["global"].get("core:extensions", []):
        known = extension["name"].split(":")[0] in {NAMESPACE, *extensions}
        if not extension["optional"] and not known:
            raise RecordingError(
                f"{where}: needs the extension {extension['name']!r}, which is not known here; "
                f"extensions=({extension['name']!r},) says that you take care of it"
            )
    return metadata


@functools.cache
def _validator():
    # The schema itself is checked once, not for each of a thousand channels.
    import jsonschema
    from sigmf import schema

    return jsonschema.Draft202012Validator(schema.get_schema())


def validate_metadata(where, metadata):
    """Raise RecordingError where the schema of the standard is not met."""
    from jsonschema.exceptions import best_match

    known = {key: metadata[key] for key in _SECTIONS if key in metadata}
    error = best_match(_validator().iter_errors(known))
    if error is not None:
        place = ".".join(str(part) for part in error.absolute_path) or "top level"
        reason = error.message if len(error.message) <= 200 else error.message[:197] + "..."
        raise RecordingError(f"{where}: not valid SigMF {schema_version()} at {place}: {reason}")
    for section in ("captures", "annotations"):
        starts = [entry["core:sample_start"] for entry in known[section]]
        for index, (first, second) in enumerate(itertools.pairwise(starts)):
            if second < first:
                raise RecordingError(
                    f"{where}: {section}[{index + 1}] starts at sample {second}, expected {first} "
                    "or more: they are sorted by core:sample_start"
                )
    for index, annotation in enumerate(known["annotations"]):
        edges = [annotation.get(f"core:freq_{side}_edge") for side in ("lower", "upper")]
        if (edges[0] is None) != (edges[1] is None):
            raise RecordingError(
                f"{where}: annotation {index} has one frequency edge, expected both or neither"
            )


def _not_json(word):
    raise ValueError(f"{word} is not a JSON number")


def plain(number):
    """Whole numbers as JSON integers: 156000000, not 156000000.0."""
    if number is None:
        return None
    return int(number) if float(number).is_integer() else float(number)


def entries(name, fields):
    """A copy of further entries whose keys carry their namespace."""
    for key in fields or {}:
        if not isinstance(key, str) or ":" not in key:
            raise wrong_value(name, "a dict with namespaced keys such as 'receiver:gain'", fields)
    return copy.deepcopy(fields or {})


def extension_rows(extensions):
    """Extensions as the list of objects that ``core:extensions`` holds, None for none."""
    accepted = "a sequence of (name, version, optional)"
    try:
        rows = [(name, version, optional) for name, version, optional in extensions]
    except (TypeError, ValueError):
        raise wrong_type("extensions", accepted, extensions) from None
    for name, version, optional in rows:
        if not (isinstance(name, str) and isinstance(version, str) and isinstance(optional, bool)):
            raise wrong_type("extensions", accepted, extensions)
    return [{"name": n, "version": v, "optional": o} for n, v, o in rows] or None
