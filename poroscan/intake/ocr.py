"""Reading one line of letters, offline: recognition only, with the model that the extra ``ocr`` ships.

The network is a convolutional one with connectionist temporal classification (Graves et al. 2006, ICML, 369–376), run by
onnxruntime on one thread; nothing is ever downloaded.
"""

from __future__ import annotations

import importlib.util
from functools import lru_cache
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from poroscan.errors import MissingExtraError

_REMEDY = "install poroscan[ocr] to read scale-bar labels, or give the bar's length in the sidecar table"
_HEIGHT = 48  # rows that the network takes
_LEAST_WIDTH, _MOST_WIDTH = 320, 1600


def read_line(crop: npt.NDArray[np.float32]) -> tuple[str, float]:
    """Read one line of letters.

    Parameters
    ----------
    crop
        2-D array, 0…1, tightly around the line with a margin of about a third of its height.

    Returns
    -------
    text, confidence
        What it says, and the mean probability of its characters (0…1; 0 for an empty text).

    Raises
    ------
    MissingExtraError
        If the extra ``ocr`` is not installed.
    """
    session, characters = _model()
    scores = session.run(None, {session.get_inputs()[0].name: _prepared(crop)})[0][0]
    best = scores.argmax(axis=1)
    new = np.ones(len(best), dtype=bool)
    new[1:] = best[1:] != best[:-1]
    kept = np.flatnonzero(new & (best != 0))  # 0 is the blank
    text = "".join(characters[best[i]] for i in kept)
    return text, float(scores[kept, best[kept]].mean()) if len(kept) else 0.0


def available() -> bool:
    """True where the extra ``ocr`` is installed."""
    return _model_path() is not None and importlib.util.find_spec("onnxruntime") is not None


def _model_path() -> Path | None:
    spec = importlib.util.find_spec("rapidocr")
    if spec is None or spec.origin is None:
        return None
    models = sorted(Path(spec.origin).parent.glob("models/*rec*.onnx"))
    return models[0] if models else None


@lru_cache(maxsize=1)
def _model() -> tuple[Any, list[str]]:
    path = _model_path()
    if path is None:
        raise MissingExtraError(f"the reader of scale-bar labels is not installed; {_REMEDY}")
    try:
        import onnxruntime
    except ImportError:
        raise MissingExtraError(f"onnxruntime is not installed; {_REMEDY}") from None
    options = onnxruntime.SessionOptions()
    options.intra_op_num_threads = options.inter_op_num_threads = 1
    options.log_severity_level = 4
    session = onnxruntime.InferenceSession(str(path), options, providers=["CPUExecutionProvider"])
    listed = session.get_modelmeta().custom_metadata_map.get("character", "")
    if not listed:
        raise MissingExtraError(f"the installed reading model {path.name} lists no characters; {_REMEDY}")
    return session, ["", *listed.splitlines(), " "]


def _prepared(crop: npt.NDArray[np.float32]) -> npt.NDArray[np.float32]:
    """The crop at the network's height, on −1…1, dark on pale, three equal channels."""
    from PIL import Image

    grey = np.clip(crop, 0.0, 1.0)
    if np.median(grey) < 0.5 * (float(grey.min()) + float(grey.max())):
        grey = 1.0 - grey
    width = int(np.clip(round(_HEIGHT * grey.shape[1] / grey.shape[0]), 8, _MOST_WIDTH))
    picture = Image.fromarray((grey * 255 + 0.5).astype(np.uint8))
    sized = np.asarray(picture.resize((width, _HEIGHT), Image.Resampling.BILINEAR), np.float32)
    padded = np.zeros((1, 3, _HEIGHT, max(width, _LEAST_WIDTH)), np.float32)
    padded[..., :width] = sized / 127.5 - 1.0
    return padded
