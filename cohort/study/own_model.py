"""model = "file.py": a user's own model, read from below the study's folder and run only where that is allowed."""

from __future__ import annotations

import contextlib
from pathlib import Path

from cohort.model.own import LARGEST_CODE, OwnModelError, register
from cohort.reading import UnreadableError, read_plain, why_unread
from cohort.study.tree import Tree

OTHERWISE = "hepatic-lag"


def own_model(tree: Tree, name: str, folder: Path, allowed: bool) -> tuple[str, str]:
    """(the model's name, its text); another model's name and "" where it cannot be used, with the problem noted."""
    if not allowed:
        tree.problem(
            ("model",), f"{name!r} is Python code, which is run with your rights; --allow-model-code accepts it"
        )
        return OTHERWISE, ""
    try:
        code = _text(name, folder)
        return register(code, Path(name).stem), code
    except (OSError, UnreadableError, UnicodeDecodeError, OwnModelError) as error:
        why = why_unread(error) if isinstance(error, OSError | UnreadableError) else error
        tree.problem(("model",), f"{name}: {why}")
        return OTHERWISE, ""


def known(name: str, folder: Path) -> None:
    """Register a model file where it can be; what is wrong with it is said by `own_model`."""
    with contextlib.suppress(OSError, UnreadableError, UnicodeDecodeError, OwnModelError):
        register(_text(name, folder), Path(name).stem)


def _text(name: str, folder: Path) -> str:
    path = folder / name
    if not path.resolve().is_relative_to(folder.resolve()):
        raise OwnModelError("lies outside the study's folder")
    return read_plain(path, LARGEST_CODE).decode()
