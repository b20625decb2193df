"""Compare the structure of JSON documents: keys and types, not values."""

from __future__ import annotations

from collections.abc import Collection
from typing import Any

__all__ = ["differences"]


def differences(
    sample: Any, fresh: Any, *, free_keys: Collection[str] = (), optional: Collection[str] = (), where: str = "document"
) -> list[str]:
    """Where the structure of `fresh` departs from that of `sample`.

    Parameters
    ----------
    sample, fresh
        Parsed JSON documents.
    free_keys
        Names of mappings whose keys depend on the data, such as bands; their values look like the sample's first one.
    optional
        Keys that may be absent on either side.
    where
        Place in the document, for the answer.

    Notes
    -----
    Integers, floats and booleans are three types. Each item of a list must look like the first one of the sample's
    list; an empty list in the sample says nothing about the items.
    """
    if type(sample) is not type(fresh):
        return [f"{where}: {type(sample).__name__} became {type(fresh).__name__}"]
    rules: dict[str, Any] = {"free_keys": free_keys, "optional": optional}
    if isinstance(sample, dict):
        if where.rsplit(".", 1)[-1] in free_keys:
            first = next(iter(sample.values()), None)
            pairs = [] if first is None else [(first, value, f"{where}[{key}]") for key, value in fresh.items()]
            return [text for one, other, place in pairs for text in differences(one, other, **rules, where=place)]
        changed = [key for key in sample.keys() ^ fresh.keys() if key not in optional]
        found = [f"{where}.{key}: {'new' if key in fresh else 'missing'}" for key in sorted(changed)]
        for key in [key for key in sample if key in fresh]:
            found += differences(sample[key], fresh[key], **rules, where=f"{where}.{key}")
        return found
    if isinstance(sample, list) and sample:
        pairs = [(sample[0], item, f"{where}[{index}]") for index, item in enumerate(fresh)]
        return [text for one, other, place in pairs for text in differences(one, other, **rules, where=place)]
    return []
