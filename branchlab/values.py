"""Frozen value objects: every input of branchlab is one; a change makes a new object.

``@value`` turns an annotated class into a frozen `attrs` class whose constructor names misspelt arguments,
whose arrays are read-only copies, and which compares by contents and goes through JSON and back unchanged.
"""

import base64
import functools
import hashlib
import html
import inspect
import json

import attrs
import numpy as np

from branchlab.errors import InputError, suggestion

_KINDS: dict[str, type] = {}


def read_only(values, dtype=np.float64) -> np.ndarray:
    """Return a contiguous read-only copy (attrs converter for array fields)."""
    array = np.array(values, dtype=dtype, order="C")
    array.setflags(write=False)
    return array


def value(cls):
    """Class decorator: a frozen attrs class, registered for JSON, that names misspelt arguments."""
    cls = attrs.frozen(cls, slots=False, eq=False, repr=False)
    original = cls.__init__
    known = [f.alias for f in attrs.fields(cls) if f.init]

    @functools.wraps(original)
    def init(self, *args, **kwargs):
        unknown = [name for name in kwargs if name not in known]
        if unknown:
            raise InputError(
                f"{cls.__name__} has no argument {unknown[0]!r}; it takes {', '.join(known)}."
                f"{suggestion(unknown[0], known)}"
            )
        try:
            inspect.signature(original).bind(self, *args, **kwargs)
        except TypeError as slip:
            raise InputError(f"{cls.__name__}: {slip}; it takes {', '.join(known)}.") from None
        original(self, *args, **kwargs)

    cls.__init__ = init
    _KINDS[cls.__name__] = cls
    return cls


def _pack(thing):
    """Return the JSON form of a field."""
    if isinstance(thing, ValueObject):
        return thing.to_dict()
    if isinstance(thing, np.ndarray):
        data = base64.b64encode(np.ascontiguousarray(thing).tobytes()).decode("ascii")
        return {"type": "array", "dtype": thing.dtype.str, "shape": list(thing.shape), "base64": data}
    if isinstance(thing, np.generic):
        return thing.item()
    if isinstance(thing, (tuple, list)):
        return [_pack(item) for item in thing]
    return thing


def _unpack(thing):
    """Return the field that `_pack` wrote."""
    if isinstance(thing, list):
        return tuple(_unpack(item) for item in thing)
    if not isinstance(thing, dict):
        return thing
    if thing.get("type") == "array":
        try:
            raw = base64.b64decode(thing["base64"], validate=True)
            return np.frombuffer(raw, dtype=np.dtype(thing["dtype"])).reshape(thing["shape"])
        except (KeyError, ValueError, TypeError) as fault:
            raise InputError(f"an array in the JSON text cannot be read: {fault}.") from None
    return ValueObject.from_dict(thing)


def _rebuild(cls, fields):
    """Return a value object from its arguments (what a pickle holds)."""
    return cls(**fields)


class ValueObject:
    """Base of the frozen inputs: `with_`, JSON round trip, comparison by contents, short repr."""

    def with_(self, **changes):
        """Return a copy with some arguments changed."""
        fields = {f.alias: getattr(self, f.name) for f in attrs.fields(type(self)) if f.init}
        return type(self)(**{**fields, **changes})

    def to_dict(self) -> dict:
        """Return a JSON-able dict ``{"type": class name, field: value, ...}``."""
        packed = {f.alias: _pack(getattr(self, f.name)) for f in attrs.fields(type(self)) if f.init}
        return {"type": type(self).__name__, **packed}

    @classmethod
    def from_dict(cls, fields: dict):
        """Return the object that `to_dict` described; called on a class, it must be of that class."""
        if not isinstance(fields, dict) or "type" not in fields:
            raise InputError(f"expected an object with a 'type'; got {str(fields)[:60]!r}.")
        kind = fields["type"]
        if kind not in _KINDS:
            raise InputError(
                f"type {kind!r} is not known; known: {', '.join(sorted(_KINDS))}.{suggestion(kind, _KINDS)}"
            )
        made = _KINDS[kind](**{k: _unpack(v) for k, v in fields.items() if k != "type"})
        if not isinstance(made, cls):
            raise InputError(f"expected a {cls.__name__}; the text describes a {kind}.")
        return made

    def to_json(self) -> str:
        """Return the object as JSON text."""
        return json.dumps(self.to_dict(), indent=1)

    @classmethod
    def from_json(cls, text: str):
        """Return the object that JSON text describes."""
        try:
            fields = json.loads(text)
        except json.JSONDecodeError as fault:
            raise InputError(f"this is not JSON: {fault}.") from None
        return cls.from_dict(fields)

    def __eq__(self, other):
        if type(self) is not type(other):
            return NotImplemented
        return self.to_dict() == other.to_dict()

    def __hash__(self):
        return int.from_bytes(hashlib.blake2b(self.to_json().encode(), digest_size=8).digest(), "big") >> 1

    def __reduce__(self):
        # a pickle holds the arguments, not what was cached from them
        return _rebuild, (
            type(self),
            {f.alias: getattr(self, f.name) for f in attrs.fields(type(self)) if f.init},
        )

    def _described(self):
        """Yield (name, short text) of every argument."""
        for f in attrs.fields(type(self)):
            if f.init:
                thing = getattr(self, f.name)
                if isinstance(thing, np.ndarray):
                    text = f"array of shape {thing.shape}"
                elif isinstance(thing, float):
                    text = f"{thing:.6g}"
                else:
                    text = repr(thing)
                yield f.alias, text

    def __repr__(self):
        return f"{type(self).__name__}({', '.join(f'{name}={text}' for name, text in self._described())})"

    def _repr_html_(self):
        rows = "".join(
            f"<tr><th style='text-align:left'>{html.escape(name)}</th>"
            f"<td style='text-align:left'>{html.escape(text)}</td></tr>"
            for name, text in self._described()
        )
        return f"<table><caption><b>{type(self).__name__}</b></caption>{rows}</table>"
