"""The published JSON Schema describes exactly what is accepted."""

from __future__ import annotations

import copy
import json
import operator
import re
import tomllib

import pytest

from meterfix.intake.site import schema

TYPES = {
    "object": dict,
    "array": list,
    "string": str,
    "integer": int,
    "number": (int, float),
    "boolean": bool,
    "null": type(None),
}
BOUNDS = {
    "exclusiveMinimum": operator.gt,
    "minimum": operator.ge,
    "maximum": operator.le,
}
SILENT = {"title", "description", "examples", "default", "$defs", "$schema", "discriminator"}


def complaints(rule, value, root, place="$"):
    """Judge a value by JSON Schema 2020-12, the keywords that the schema uses; others fail."""
    found = []
    for keyword, limit in rule.items():
        if keyword in SILENT or keyword in {
            *("properties", "propertyNames", "additionalProperties", "patternProperties"),
        }:
            continue  # the first say nothing of validity; the others are judged below
        if keyword == "$ref":
            *_, name = limit.split("/")
            found += complaints(root["$defs"][name], value, root, place)
        elif keyword == "type":
            good = isinstance(value, TYPES[limit])
            if limit != "boolean" and isinstance(value, bool):
                good = False
            found += [] if good else [f"{place}: not {limit}"]
        elif keyword in {"anyOf", "oneOf"}:
            passed = sum(not complaints(choice, value, root, place) for choice in limit)
            good = passed == 1 if keyword == "oneOf" else passed > 0
            found += [] if good else [f"{place}: {passed} of {keyword}"]
        elif keyword == "enum":
            found += [] if value in limit else [f"{place}: {value!r} not in {limit}"]
        elif keyword == "const":
            found += [] if value == limit else [f"{place}: not {limit!r}"]
        elif keyword == "pattern":
            good = not isinstance(value, str) or re.search(limit, value)
            found += [] if good else [f"{place}: pattern"]
        elif keyword in {"minLength", "minItems", "minProperties"}:
            found += (
                [] if not hasattr(value, "__len__") or len(value) >= limit else [f"{place}: short"]
            )
        elif keyword in {"maxLength", "maxItems"}:
            found += (
                [] if not hasattr(value, "__len__") or len(value) <= limit else [f"{place}: long"]
            )
        elif keyword in BOUNDS:
            good = not isinstance(value, int | float) or BOUNDS[keyword](value, limit)
            found += [] if good else [f"{place}: {keyword} {limit}"]
        elif keyword == "items":
            if isinstance(value, list):
                for n, item in enumerate(value):
                    found += complaints(limit, item, root, f"{place}[{n}]")
        elif keyword == "required":
            if isinstance(value, dict):
                found += [f"{place}: {key} missing" for key in limit if key not in value]
        else:
            pytest.fail(f"keyword {keyword} is not judged by this test")
    if isinstance(value, dict) and rule.get("type") == "object":
        known = rule.get("properties", {})
        patterns = rule.get("patternProperties", {})
        for key, item in value.items():
            here = f"{place}.{key}"
            matching = [sub for pattern, sub in patterns.items() if re.search(pattern, key)]
            if key in known:
                found += complaints(known[key], item, root, here)
            elif matching:
                found += complaints(matching[0], item, root, here)
            elif rule.get("additionalProperties") is False:
                found.append(f"{here}: unknown")
            elif isinstance(rule.get("additionalProperties"), dict):
                found += complaints(rule["additionalProperties"], item, root, here)
    return found


@pytest.fixture(scope="module")
def example(example_path):
    return tomllib.loads(example_path.read_text(encoding="utf-8"))


def test_the_schema_is_plain_json_and_its_references_resolve():
    """It survives JSON, names its dialect, and every $ref leads somewhere."""
    described = schema()
    text = json.dumps(described)
    assert json.loads(text) == described
    assert described["$schema"] == "https://json-schema.org/draft/2020-12/schema"
    for name in re.findall(r'"#/\$defs/([^"]+)"', text):
        assert name in described["$defs"]


def test_the_example_conforms(example):
    """The commented example obeys the published schema."""
    described = schema()
    assert complaints(described, example, described) == []


@pytest.mark.parametrize(
    ("steps", "value"),
    [
        (("site", "nmae"), "x"),
        (("site", "gas_day_start"), 6),
        (("source", "station", "delivery"), "sometimes"),
        (("signal", "PDT-101", "range"), ["0 mbar"]),
        (("meter", "FT-101", "orifice", "bore"), 92.4),
        (("gas", "natural_gas", "isentropic_exponent"), 0.5),
        (("envelope", "works", "quantities"), ["volume"]),
        (("signal", "PDT-101", "uncertainty", 0, "acts_on"), "both"),
        (("signal", "PDT-101", "uncertainty", 0, "k"), 0),
        (("signal", "PDT-101", "uncertainty", 0, "size"), 0.04),
        (("uncertainty", "pressure calibrator PC-3", "kind"), "calibrator"),
        (("uncertainty", "pressure calibrator PC-3", "part"), []),
        (("meter", "FT-101", "nozzle"), {"form": "ISA_1932"}),
        (("gas", "natural_gas", "calorific_value", "method"), "ISO 6976:1995"),
        (("gas", "natural_gas", "composition", 0, "uncertainty", "butane"), 0.1),
        (("envelope", "works/main"), {"in": ["FT-101"], "out": ["FT-201"], "tolerance": "1 %"}),
    ],
)
def test_the_schema_refuses_what_the_reader_refuses(example, steps, value):
    """An unknown key, a bare number, a wrong word: the schema alone finds them."""
    described = schema()
    broken = copy.deepcopy(example)
    table = broken
    for step in steps[:-1]:
        table = table[step]
    table[steps[-1]] = value
    assert complaints(described, broken, described) != []
