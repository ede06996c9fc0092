"""The sealed model and its arithmetic, in plain Python: standard library only.

    from runtime_min import load, log_odds, probability, decide, seal

Names load when they are first used, so that importing the package costs nothing.
"""

_HOMES = {
    "load": "codec",
    "load_trained": "codec",
    "seal": "sealing",
    "log_odds": "score",
    "outputs": "score",
    "probability": "score",
    "decide": "score",
    "check_inputs": "score",
    "FirmlogitError": "errors",
    "SealedModel": "model",
    "TrainedModel": "model",
}

__all__ = sorted(_HOMES)


def __getattr__(name):  # type: ignore[no-untyped-def]
    if name not in _HOMES:
        raise AttributeError("runtime_min has no " + name)
    module = __import__("runtime_min." + _HOMES[name], None, None, [name])
    return getattr(module, name)
