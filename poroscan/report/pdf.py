"""The report as PDF: the same content as the page, set by typst, tagged for screen readers (PDF/UA-1).

The template is fixed; text travels as data, so that no file name can be taken for markup. Pictures are read from the run folder,
charts are the page's own SVG. The bytes depend on the content only: the document carries no date.
"""

from __future__ import annotations

import dataclasses
import hashlib
import html
import json
import re
import tempfile
from collections.abc import Mapping
from importlib import resources
from pathlib import Path
from typing import Any

import imagecodecs
from markupsafe import Markup

from poroscan.errors import MissingExtraError, PoroscanError

#: Keys of the content whose value is the path of a picture.
_PICTURES = ("picture", "overview")
_JPEG_LEVEL = 62
_SVG_ROOT = '<svg xmlns="http://www.w3.org/2000/svg" font-family="DejaVu Sans" '
#: Scripts that the fonts shipped with the program hold; anything else asks the fonts of the system.
_COVERED = re.compile(r"[\u0000-\u058f\u1e00-\u23ff\u2500-\u27bf\ufb00-\ufb06\ufe00-\ufe0f]*")


def write_pdf(content: Mapping[str, Any], run: Path, target: Path) -> None:
    """Write the report as PDF.

    Parameters
    ----------
    content
        As ``content.report_content`` gives it.
    run
        Run folder, where the pictures lie.
    target
        File to write.

    Raises
    ------
    MissingExtraError
        If the package that sets the PDF is not installed.
    PoroscanError
        If it refuses the document; the message says why.
    """
    try:
        import typst
    except ImportError:
        raise MissingExtraError(
            "report.pdf needs the extra pdf: pip install 'poroscan[pdf]' (report.html is written without it)"
        ) from None
    template = resources.files("poroscan.report").joinpath("templates/report.typ").read_bytes()
    compiler: Any = typst
    # the pictures lie beside the target, so that a full disk is found where the report is written
    with tempfile.TemporaryDirectory(dir=target.parent, prefix=".new-") as folder:
        data = json.dumps(_with_pictures(plain(content), run, Path(folder)), ensure_ascii=False)
        try:
            made = compiler.compile(
                template,
                root=folder,
                font_paths=[str(_fonts())],
                ignore_system_fonts=_COVERED.fullmatch(data) is not None,
                sys_inputs={"content": data},
                pdf_standards=["ua-1"],
            )
        except RuntimeError as error:
            raise PoroscanError(f"report.pdf could not be set ({' '.join(str(error).split())[:300]})") from error
    target.write_bytes(made)


def _with_pictures(content: Any, run: Path, folder: Path) -> Any:
    """Pictures as JPEG, which a PDF holds as they are; anything else would be unpacked and ten times as large."""
    if isinstance(content, list):
        return [_with_pictures(value, run, folder) for value in content]
    if not isinstance(content, dict):
        return content
    return {
        key: _picture(value, run, folder) if key in _PICTURES and value else _with_pictures(value, run, folder)
        for key, value in content.items()
    }


def _picture(name: str, run: Path, folder: Path) -> str:
    samples = imagecodecs.imread(run / name)
    made = f"{hashlib.sha256(name.encode()).hexdigest()[:16]}.jpg"
    (folder / made).write_bytes(imagecodecs.jpeg_encode(samples, level=_JPEG_LEVEL))
    return made


def plain(value: Any) -> Any:
    """Content as values that JSON can hold; a chart becomes its SVG with its words, or its words alone.

    Parameters
    ----------
    value
        Any part of the content.
    """
    if isinstance(value, Markup):
        return _chart(str(value))
    if dataclasses.is_dataclass(value) and not isinstance(value, type):
        return {f.name: plain(getattr(value, f.name)) for f in dataclasses.fields(value)}
    if isinstance(value, Mapping):
        return {key: plain(v) for key, v in value.items()}
    if isinstance(value, list | tuple):
        return [plain(v) for v in value]
    if isinstance(value, str):
        return value.encode("utf-8", "backslashreplace").decode()
    return value


def _chart(markup: str) -> dict[str, str]:
    if not markup.startswith("<svg "):
        return {"svg": "", "words": html.unescape(re.sub(r"<[^>]+>", "", markup))}
    label = re.search(r'aria-label="([^"]*)"', markup)
    svg = markup.replace("<svg ", _SVG_ROOT, 1)
    return {"svg": svg, "words": html.unescape(label[1]) if label else ""}


def _fonts() -> Path:
    """DejaVu, which comes with matplotlib: the same glyphs on every machine."""
    import matplotlib

    return Path(matplotlib.get_data_path()) / "fonts" / "ttf"
