"""``result.json``: a result as strict JSON, and back to the same record.

The keys follow the records of :mod:`compsize.plan.records`, but the rows of the plan are ``installs``, its
site costs ``site_costs``, and the cases with the plan ``cases``. ``plan_found`` tells the empty plan
(build nothing) from no plan.
"""

from __future__ import annotations

import dataclasses
import json
import math
import types
import typing
from typing import Any, Literal, NoReturn

from compsize.errors import Fault, InputError, InternalError
from compsize.plan.records import COLUMN_NAMES, MarginsResult, SizeResult, to_plain

__all__ = ["FORMAT", "FORMAT_FAMILY", "from_json", "to_json"]

FORMAT_FAMILY = "compsize result"
FORMAT = "compsize result 1"
FILE = "result.json"

Kind = Literal["size", "margins"]


def to_json(result: SizeResult | MarginsResult, kind: Kind) -> str:
    """The text of ``result.json`` for the command ``kind``.

    Strict JSON: raises :class:`InternalError` at a number that is not finite, naming its place.
    """
    wanted: type = SizeResult if kind == "size" else MarginsResult
    if not isinstance(result, wanted):
        raise InternalError(f"A {type(result).__name__} is no result of `compsize {kind}`.")
    plain: dict[str, Any] = to_plain(result)
    whole: dict[str, Any] = {"format": FORMAT, "command": kind}
    if isinstance(result, SizeResult):
        plan = plain.pop("plan")
        plain["plan_found"] = plan is not None
        plain["installs"] = [] if plan is None else plan["rows"]
        plain["site_costs"] = [] if plan is None else plan["site_costs"]
        plain["cases"] = plain.pop("cases_after")
        first = ("title", "status", "sentence", "cost", "cost_bound", "gap_pct", "proof", "plan_found")
        order = (*first, "installs", "site_costs", "cases", "cases_before")
        whole |= {key: plain.pop(key) for key in order}
    else:
        whole |= {"title": plain.pop("title"), "status": "met" if result.met else "unmet"}
    whole |= plain
    _refuse_non_finite(whole, "")
    return json.dumps(whole, ensure_ascii=False, allow_nan=False, indent=1) + "\n"


def from_json(text: str) -> SizeResult | MarginsResult:
    """The result that :func:`to_json` wrote. Raises :class:`InputError` where the text is something else."""
    try:
        plain = json.loads(text, parse_constant=_no_constant)
    except (ValueError, RecursionError) as fault:
        raise _bad(f"is not JSON: {fault}.") from fault
    if not isinstance(plain, dict) or plain.get("format") != FORMAT:
        found = plain.get("format") if isinstance(plain, dict) else None
        raise _bad(f"has format {found!r}, but this version reads {FORMAT!r}.", "Run the study again.")
    plain.pop("format")
    command = plain.pop("command", None)
    if command == "margins":
        plain.pop("status", None)
        return typing.cast(MarginsResult, _read(MarginsResult, plain, ""))
    if command != "size":
        raise _bad(f"has command {command!r}, and `size` and `margins` are known.")
    missing = [key for key in ("plan_found", "installs", "site_costs", "cases") if key not in plain]
    if missing:
        raise _bad(f"has no key `{missing[0]}`.")
    plan = {"rows": plain.pop("installs"), "site_costs": plain.pop("site_costs")}
    plain["plan"] = plan if _read(bool, plain.pop("plan_found"), "plan_found") else None
    plain["cases_after"] = plain.pop("cases")
    return typing.cast(SizeResult, _read(SizeResult, plain, ""))


def _read(kind: Any, value: Any, where: str) -> Any:
    """``value`` as ``kind``, an annotation of a record: its type arguments are followed all the way down."""
    if dataclasses.is_dataclass(kind) and isinstance(kind, type):
        return _read_record(kind, value, where)
    origin, arguments = typing.get_origin(kind), typing.get_args(kind)
    if origin in (types.UnionType, typing.Union):
        if value is None and type(None) in arguments:
            return None
        return _read(next(item for item in arguments if item is not type(None)), value, where)
    if origin is tuple:
        if not isinstance(value, list):
            raise _bad(f"`{where}` should be a list.")
        if len(arguments) == 2 and arguments[1] is Ellipsis:
            return tuple(_read(arguments[0], item, f"{where}[{i}]") for i, item in enumerate(value))
        if len(value) != len(arguments):
            raise _bad(f"`{where}` should have {len(arguments)} entries.")
        pairs = zip(arguments, value, strict=True)
        return tuple(_read(part, item, f"{where}[{i}]") for i, (part, item) in enumerate(pairs))
    if origin is Literal:
        if value not in arguments:
            raise _bad(f"`{where}` is {value!r}, and {', '.join(map(repr, arguments))} are known.")
        return value
    if kind is float and isinstance(value, (int, float)) and not isinstance(value, bool):
        try:
            number = float(value)
        except OverflowError:
            number = math.inf
        if not math.isfinite(number):
            raise _bad(f"`{where}` is not a finite number.")
        return number
    if type(value) is not kind:
        raise _bad(f"`{where}` is {value!r}, which is not of type {getattr(kind, '__name__', kind)}.")
    return value


def _read_record(record: type, value: Any, where: str) -> Any:
    if not isinstance(value, dict):
        raise _bad(f"`{where}` should be an object.")
    hints = typing.get_type_hints(record)
    rest = dict(value)
    read: dict[str, Any] = {}
    for item in dataclasses.fields(record):
        key = COLUMN_NAMES.get(item.name, item.name)
        place = f"{where}.{key}" if where else key
        if key in rest:
            read[item.name] = _read(hints[item.name], rest.pop(key), place)
        elif item.default is dataclasses.MISSING and item.default_factory is dataclasses.MISSING:
            raise _bad(f"has no key `{place}`.")
    if rest:
        raise _bad(f"has the unknown key `{where + '.' if where else ''}{next(iter(rest))}`.")
    return record(**read)


def _refuse_non_finite(value: Any, where: str) -> None:
    if isinstance(value, float) and not math.isfinite(value):
        raise InternalError(f"{where} of the result is {value}.")
    if isinstance(value, dict):
        for key, item in value.items():
            _refuse_non_finite(item, f"{where}.{key}" if where else key)
    elif isinstance(value, list):
        for number, item in enumerate(value):
            _refuse_non_finite(item, f"{where}[{number}]")


def _no_constant(name: str) -> NoReturn:
    raise ValueError(f"{name} is not a number of JSON")


def _bad(message: str, remedy: str = "") -> InputError:
    return InputError([Fault(FILE, message, remedy)])
