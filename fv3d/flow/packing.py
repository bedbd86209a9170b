"""Nested objects as plain arrays and one text, and back: nothing in them is ever executed.

Packed are numbers, texts, arrays, sparse matrices, tuples, lists, mappings with text keys, and
fv3d's own dataclasses; an array that occurs twice is stored once.
"""

from __future__ import annotations

import dataclasses
import hashlib
import json
import sys
from collections.abc import Callable, Mapping
from typing import Any

import numpy as np
import scipy.sparse as sparse

from ..errors import CaseError, FileError

SPARSE = {"csr": sparse.csr_matrix, "csc": sparse.csc_matrix}
Otherwise = Callable[[Any], Any]


def _refuse(thing: Any) -> Any:
    raise CaseError("A checkpoint cannot hold everything this run needs.", where="checkpoint=",
                    got=type(thing).__name__,
                    remedy="Keep numbers, arrays and frozen dataclasses of fv3d in the state of a "
                           "source of your own.")


@dataclasses.dataclass
class Packer:
    """Turns objects into a tree of plain values that refers to ``arrays`` by number.

    ``otherwise`` is asked for a stand-in for what cannot be packed.
    """

    otherwise: Otherwise = _refuse
    arrays: list[np.ndarray] = dataclasses.field(default_factory=list)
    _known: dict[int, int] = dataclasses.field(default_factory=dict)

    def pack(self, thing: Any) -> Any:
        """The tree of an object."""
        if thing is None or isinstance(thing, bool | int | float | str):
            return thing
        if isinstance(thing, np.generic):
            return thing.item()
        if isinstance(thing, np.ndarray) and thing.dtype != object:
            return {"array": self._number(thing)}
        if sparse.issparse(thing) and thing.format in SPARSE:
            return {"sparse": thing.format, "shape": list(thing.shape), "parts": [
                self.pack(part) for part in (thing.data, thing.indices, thing.indptr)]}
        if isinstance(thing, tuple | list):
            return {type(thing).__name__: [self.pack(part) for part in thing]}
        if isinstance(thing, Mapping) and all(isinstance(key, str) for key in thing):
            return {"mapping": {key: self.pack(part) for key, part in thing.items()}}
        if dataclasses.is_dataclass(thing) and not isinstance(thing, type) \
                and type(thing).__module__.startswith("fv3d."):
            parts = {f.name: self.pack(getattr(thing, f.name)) for f in dataclasses.fields(thing)}
            return {"class": _name(thing), "fields": parts}
        return self.otherwise(thing)

    def _number(self, array: np.ndarray) -> int:
        number = self._known.setdefault(id(array), len(self.arrays))
        if number == len(self.arrays):
            self.arrays.append(array)
        return number


def _name(thing: Any) -> str:
    return f"{type(thing).__module__}:{type(thing).__qualname__}"


def unpack(tree: Any, arrays: list[np.ndarray]) -> Any:
    """The object of a tree.

    Raises
    ------
    FileError
        A tree that no object of this version has.
    """
    if not isinstance(tree, dict):
        return tree
    try:
        if "array" in tree:
            return arrays[tree["array"]]
        if "sparse" in tree:
            parts = tuple(unpack(part, arrays) for part in tree["parts"])
            return SPARSE[tree["sparse"]](parts, shape=tuple(tree["shape"]))
        if "tuple" in tree or "list" in tree:
            kind = tuple if "tuple" in tree else list
            return kind(unpack(part, arrays) for part in tree[kind.__name__])
        if "mapping" in tree:
            return {key: unpack(part, arrays) for key, part in tree["mapping"].items()}
        thing = object.__new__(_own_class(tree["class"]))
        names = {f.name for f in dataclasses.fields(thing)}
        if names != set(tree["fields"]):
            raise KeyError(tree["class"])
        for name, part in tree["fields"].items():
            object.__setattr__(thing, name, unpack(part, arrays))
    except (KeyError, IndexError, TypeError, ValueError, AttributeError) as error:
        raise FileError("A checkpoint holds what this version does not know.", where="checkpoint",
                        got=str(error), remedy="Start the run anew.") from None
    return thing


def _own_class(name: str) -> Any:
    module, _, kind = name.partition(":")
    found = getattr(sys.modules[module], kind) if module.startswith("fv3d.") else None
    if not (isinstance(found, type) and dataclasses.is_dataclass(found)):
        raise KeyError(name)
    return found


def digest(*things: Any) -> str:
    """SHA-256 of objects; what cannot be packed counts by the name of its class."""
    packer = Packer(otherwise=_name)
    text = json.dumps([packer.pack(thing) for thing in things], sort_keys=True)
    return array_digest(text, packer.arrays)


def array_digest(text: str, arrays: list[np.ndarray]) -> str:
    """SHA-256 of a text and arrays, their types and shapes included."""
    total = hashlib.sha256(text.encode())
    for array in arrays:
        total.update(f"{array.dtype.str}{array.shape}".encode())
        total.update(np.ascontiguousarray(array).data if array.size else b"")
    return total.hexdigest()
