"""Sealed model -> artefacts -> checks -> release. Names load when they are first used."""

_HOMES = {"write_release": "release", "check_release": "check"}

__all__ = sorted(_HOMES)


def __getattr__(name: str) -> object:
    if name not in _HOMES:
        raise AttributeError(f"export has no {name}")
    return getattr(__import__(f"export.{_HOMES[name]}", None, None, [name]), name)
