"""Reading CCSDS Orbit Mean-elements Messages: the open format in its three notations."""

from __future__ import annotations

import json
import re
from datetime import UTC, datetime, timedelta
from pathlib import Path
from xml.etree import ElementTree as ET

from envflux.errors import MISSING, InputError

_LARGEST_BYTES = 1_000_000

_NUMBERS = {
    "MEAN_MOTION": "mean_motion_rev_day",
    "ECCENTRICITY": "eccentricity",
    "INCLINATION": "inclination_deg",
    "RA_OF_ASC_NODE": "raan_deg",
    "ARG_OF_PERICENTER": "arg_perigee_deg",
    "MEAN_ANOMALY": "mean_anomaly_deg",
    "BSTAR": "bstar",
    "MEAN_MOTION_DOT": "mean_motion_dot",
    "MEAN_MOTION_DDOT": "mean_motion_ddot",
}
_OPTIONAL = {"BSTAR", "MEAN_MOTION_DOT", "MEAN_MOTION_DDOT"}
_TEXTS = {"OBJECT_NAME": "object_name", "OBJECT_ID": "object_id"}
# What SGP4 elements must say of themselves, where they say it; a plain export may leave these out.
_REQUIRED_WORDS = {
    "CENTER_NAME": ("EARTH",),
    "REF_FRAME": ("TEME",),
    "TIME_SYSTEM": ("UTC",),
    "MEAN_ELEMENT_THEORY": ("SGP4", "SGP/SGP4", "SGP"),
}


def read_message(path: str | Path) -> dict[str, object]:
    """Read the fields of an `OmmOrbit` from a file with one message in XML, KVN or JSON.

    Parameters
    ----------
    path : str or path
        The file.

    Returns
    -------
    dict
        Values by the name of the field.

    Raises
    ------
    InputError
        Naming ``path`` or the keyword of the message.

    References
    ----------
    CCSDS 502.0-B-3, *Orbit Data Messages* (2023), section 4 and annex; CCSDS 505.0-B-3 for XML.
    """
    place = Path(path)
    try:
        size = place.stat().st_size
        if size > _LARGEST_BYTES:
            raise InputError("path", str(path), f"a file of at most {_LARGEST_BYTES:,} bytes, not {size:,}")
        text = place.read_text(encoding="utf-8-sig")
    except (OSError, UnicodeDecodeError):
        raise InputError("path", str(path), "a readable text file with an orbit mean-elements message") from None
    start = text.lstrip()[:1]
    if start == "<":
        records = _from_xml(text, path)
    elif start in ("{", "["):
        records = _from_json(text, path)
    else:
        records = _from_kvn(text, path)
    if len(records) != 1:
        raise InputError("path", str(path), f"a file with one message, not {len(records)}")
    return _fields(records[0])


def _from_xml(text: str, path: object) -> list[dict[str, str]]:
    if "<!DOCTYPE" in text or "<!ENTITY" in text:
        raise InputError(
            "path", str(path), "XML without a document type: such declarations can be made to exhaust memory"
        )
    try:
        root = ET.fromstring(text)
    except ET.ParseError as error:
        raise InputError("path", str(path), f"well-formed XML (line {error.position[0]})") from None
    messages = [element for element in root.iter() if _local(element.tag) == "segment"]
    return [
        {_local(leaf.tag): (leaf.text or "").strip() for leaf in message.iter() if len(leaf) == 0}
        for message in messages
    ]


def _local(tag: object) -> str:
    return str(tag).rpartition("}")[2]


def _from_json(text: str, path: object) -> list[dict[str, str]]:
    try:
        data = json.loads(text)
    except ValueError as error:
        raise InputError("path", str(path), f"valid JSON ({error})") from None
    records = data if isinstance(data, list) else [data]
    flat = [_flat(record) for record in records]
    if not all(flat):
        raise InputError("path", str(path), "JSON with the keywords of an orbit mean-elements message")
    return flat


def _flat(record: object) -> dict[str, str]:
    """Keywords of a record, whether in one table or nested by section."""
    found: dict[str, str] = {}
    if isinstance(record, dict):
        for key, value in record.items():
            if isinstance(value, dict):
                found.update(_flat(value))
            elif value is not None and not isinstance(value, list):
                found[str(key).upper()] = str(value).strip()
    return found


def _from_kvn(text: str, path: object) -> list[dict[str, str]]:
    records: list[dict[str, str]] = []
    for line in text.splitlines():
        key, equals, value = (part.strip() for part in line.partition("="))
        if not equals or key.startswith("COMMENT"):
            continue
        if key == "CCSDS_OMM_VERS" or not records:
            records.append({})
        # A unit may follow the number in square brackets.
        records[-1][key.upper()] = re.sub(r"\s*\[[^\]]*\]\s*$", "", value)
    if not records:
        raise InputError("path", str(path), "an orbit mean-elements message in XML, JSON or lines of KEY = value")
    return records


def _fields(record: dict[str, str]) -> dict[str, object]:
    for key, words in _REQUIRED_WORDS.items():
        if key in record and record[key].upper() not in words:
            raise InputError(key, record[key], f"{words[0]}: these elements are read for SGP4")
    fields: dict[str, object] = {"epoch": _epoch(record.get("EPOCH", ""))}
    for key, name in _NUMBERS.items():
        if key not in record:
            if key in _OPTIONAL:
                continue
            raise InputError(key, MISSING, "in the message")
        try:
            fields[name] = float(record[key])
        except ValueError:
            raise InputError(key, record[key], "a number") from None
    fields.update({name: record[key] for key, name in _TEXTS.items() if key in record})
    return fields


def _epoch(text: str) -> datetime:
    """Read a CCSDS time code (CCSDS 301.0-B-4, ASCII A or B), which is UTC here."""
    pattern = r"(\d{4})-(?:(\d{2})-(\d{2})|(\d{3}))T(\d{2}):(\d{2}):(\d{2})(?:\.(\d*))?Z?"
    match = re.fullmatch(pattern, text)
    try:
        if match is None:
            raise ValueError(text)
        year, month, day, ordinal, hour, minute, second, fraction = match.groups()
        if ordinal:
            date = datetime(int(year), 1, 1, tzinfo=UTC) + timedelta(days=int(ordinal) - 1)
        else:
            date = datetime(int(year), int(month), int(day), tzinfo=UTC)
        within = timedelta(hours=int(hour), minutes=int(minute), seconds=int(second))
        return date + within + timedelta(microseconds=round(float(f"0.{fraction or 0}") * 1e6))
    except (ValueError, OverflowError):
        raise InputError("EPOCH", text or MISSING, "a time such as 2031-03-20T06:00:00.000000") from None
