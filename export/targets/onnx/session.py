"""The process that `runner` starts: reads what to run as JSON from standard input, prints one line of JSON a way."""

import json
import sys
from typing import Any

OUTPUTS = ("log_odds", "probability", "decision")


def main() -> None:
    """Run every way that is asked for, in order; a way that fails says why and does not stop the next."""
    asked = json.load(sys.stdin)
    sys.path[:] = asked["path"]
    import numpy as np
    import onnxruntime

    kind, *kinds = asked["kinds"]
    rows = np.frombuffer(bytes.fromhex(asked["rows"]), kind).reshape(asked["shape"])
    version = f"onnxruntime {onnxruntime.__version__}"
    for way in asked["ways"]:
        said: dict[str, Any] = {"version": version, "model_id": None, "trouble": None}
        try:
            session = open_session(onnxruntime, asked["model"], way)
            said["model_id"] = session.get_modelmeta().custom_metadata_map.get("model_id")
            results = score(session, rows, kinds, way["one_at_a_time"])
            for name, result in zip(OUTPUTS, results, strict=True):
                said[name] = result.tobytes().hex()
        except Exception as error:  # whatever the runtime raises is the finding
            said["trouble"] = short(str(error)) or type(error).__name__
        print(json.dumps(said), flush=True)


def short(text: str) -> str:
    """A message on one line, cut where it runs on, without characters that act on a terminal."""
    return "".join(character if character.isprintable() else "?" for character in " ".join(text.split())[:400])


def open_session(onnxruntime: Any, model: str, way: dict[str, Any]) -> Any:
    """A session on the CPU with the level and the threads of one way."""
    options = onnxruntime.SessionOptions()
    options.graph_optimization_level = getattr(onnxruntime.GraphOptimizationLevel, way["level"])
    options.intra_op_num_threads = options.inter_op_num_threads = way["threads"]
    options.log_severity_level = 4
    return onnxruntime.InferenceSession(model, options, providers=["CPUExecutionProvider"])


def score(session: Any, rows: Any, kinds: list[str], one_at_a_time: bool) -> list[Any]:
    """The three outputs of all rows. Raises ValueError where a batch of none or of one is not what it should be."""
    import numpy as np

    for part in (rows[:0], rows[:1]):
        answer(session, part, kinds)
    if not one_at_a_time or not len(rows):
        return answer(session, rows, kinds)
    pieces = [answer(session, rows[at : at + 1], kinds) for at in range(len(rows))]
    return [np.concatenate(column) for column in zip(*pieces, strict=True)]


def answer(session: Any, rows: Any, kinds: list[str]) -> list[Any]:
    """log_odds, probability and decision of one batch, of the right types and lengths."""
    results: list[Any] = session.run(list(OUTPUTS), {"inputs": rows})
    for name, result, kind in zip(OUTPUTS, results, kinds, strict=True):
        if result.dtype != kind or result.shape != (len(rows),):
            raise ValueError(f"{name} of {len(rows)} rows is {result.dtype}{list(result.shape)}")
    return results


if __name__ == "__main__":
    main()
