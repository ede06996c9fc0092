"""Labelled rows -> trained model.

    from trainer import fit_map, fit_plan

Names load when they are first used, so that importing the package costs nothing.
"""

_HOMES = {
    "fit_map": "fit",
    "fit_plan": "fit",
    "read_plan": "plan",
    "read_rows": "table",
}

__all__ = sorted(_HOMES)


def __getattr__(name):  # type: ignore[no-untyped-def]
    if name not in _HOMES:
        raise AttributeError("trainer has no " + name)
    module = __import__("trainer." + _HOMES[name], None, None, [name])
    return getattr(module, name)
