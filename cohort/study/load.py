"""Read a study: file and overrides in, a checked `Study` out, or every problem at once."""

from __future__ import annotations

import copy
import json
import os
from collections.abc import Iterator, Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

from cohort.errors import Problem, StudyError, nearest
from cohort.model.catalogue import MODELS
from cohort.reading import UnreadableError, names_in, read_plain, why_unread
from cohort.study import arms as arms_of
from cohort.study import ranking as ranking_of
from cohort.study import sampling as sampling_of
from cohort.study import subjects as subjects_of
from cohort.study.files import Files
from cohort.study.lines import Path as KeyPath
from cohort.study.maps import maps
from cohort.study.oddities import oddities
from cohort.study.selection import selection
from cohort.study.spec import Output, Study
from cohort.study.tree import DEEPEST, LARGEST_TEXT, Quantity, Tree, check, dotted, parse_value, read_toml

MOST_MODELS = 12
MOST_COURSE_POINTS = 2_000_000_000


def load_study(
    path: str | os.PathLike[str], overrides: Sequence[str] = (), outside: bool = False, model_code: bool = False
) -> Study:
    """Read and check a study file; `overrides` are KEY=VALUE words, and with `outside` its data files may lie anywhere, with
    `model_code` its model may be a Python file, which is run. Raises StudyError with every problem found."""
    place = Path(path)
    try:
        data = read_plain(place, LARGEST_TEXT)
    except (OSError, UnreadableError) as error:
        near = ""
        if not os.path.exists(place):  # noqa: PTH110 -- Path.exists raises for names too long
            near = nearest(place.name, [n for n in names_in(place.parent) if n.endswith(".toml")])
        raise StudyError([Problem("", f"cannot be read: {why_unread(error)}{near}", str(path))]) from None
    return study_from(data, place, overrides, outside, model_code)


def study_from(
    data: bytes, place: Path, overrides: Sequence[str] = (), outside: bool = False, model_code: bool = False
) -> Study:
    """As `load_study`, from the file's bytes. Where `model` is a list, one study in each: the first, with the `others`."""
    raw, text = read_toml(data, str(place))
    raw, overridden = _override(raw, overrides)
    if isinstance(raw.get("model"), list):
        return _in_each(raw["model"], data, place, overrides, (outside, model_code))
    return _study(raw, text, data, place, overrides, overridden, outside, model_code)


def _in_each(names: list[Any], data: bytes, place: Path, overrides: Sequence[str], allowed: tuple[bool, bool]) -> Study:
    """The same study in each of several models; a parameter that one of them lacks is left out there, and said."""
    problem = Problem("model", f"a list of 2 to {MOST_MODELS} different models is wanted", str(place))
    if not 2 <= len(names) <= MOST_MODELS or not all(isinstance(n, str) for n in names) or len(set(names)) < len(names):
        raise StudyError([problem])
    found: list[Study] = []
    problems: list[Problem] = []
    for name in names:
        words = (*overrides, f"model={json.dumps(name)}")
        raw, text = read_toml(data, str(place))
        raw, overridden = _override(raw, words)
        elsewhere = frozenset(p for n in names if n in MODELS for p in MODELS[n].parameters)
        try:
            made = _study(raw, text, data, place, overrides, overridden - {("model",)}, *allowed, elsewhere)
            found.append(made)
        except StudyError as error:
            problems += error.problems
    if problems:
        raise StudyError(_sorted(problems))
    return replace(found[0], others=tuple(found[1:]))


def _study(
    raw: dict[str, Any],
    text: str,
    data: bytes,
    place: Path,
    overrides: Sequence[str],
    overridden: frozenset[KeyPath],
    outside: bool,
    model_code: bool,
    elsewhere: frozenset[str] = frozenset(),
) -> Study:
    """A study in one model; elsewhere: parameters that may be left out, since another model of the list has them."""
    own = str(raw.get("model", "")).endswith(".py")
    if own and model_code:  # its symbols and units are needed to read the rest
        from cohort.study.own_model import known

        known(str(raw["model"]), place.parent)
    tree = check(raw, text, str(place), overridden)
    tree.elsewhere = elsewhere
    model, code = _model(tree, place.parent, model_code)
    if own and not code:  # nothing else can be judged
        raise StudyError([p for p in tree.problems if p.key == "model"])
    seed = _seed(tree)
    card = MODELS[model]
    files = Files(place.parent, outside)
    recipe = subjects_of.recipe(tree, card, seed, files)
    weighed = any(s.weight is not None for s in recipe.strata)
    if recipe.table is not None:
        weighed = not bool((recipe.table.body_weight_kg != recipe.table.body_weight_kg).any())
    protocols = arms_of.arms(tree, card, weighed)
    output = _output(tree, recipe.count, protocols)
    seen, recruits = sampling_of.sampling(tree, protocols), sampling_of.recruitment(tree)
    chosen = selection(tree, recipe, protocols)
    ranking = ranking_of.ranking(tree, recipe, protocols, bool(chosen.eligible or chosen.match))
    mapped = maps(tree, MODELS[model], recipe)
    if tree.problems:
        raise StudyError(_sorted(tree.problems))
    title = tree.values.get("title", place.stem)
    study = Study(
        place, data, tuple(overrides), title, model, seed, recipe, protocols, output, ranking, seen, recruits,
        chosen, mapped, files.digests, dict(_settings(tree.values)),
    )  # fmt: skip
    warnings = (*tree.warnings, *oddities(study, tree))
    return replace(study, warnings=tuple(warnings), code=code)


def _settings(value: Any, path: str = "") -> Iterator[tuple[str, str]]:
    """Every leaf of the checked tree as (dotted key, value in its kept unit); list entries by name where they have one."""
    if isinstance(value, dict):
        for name, inner in value.items():
            yield from _settings(inner, f"{path}.{name}" if path else name)
    elif isinstance(value, list) and any(isinstance(item, dict) for item in value):
        for i, item in enumerate(value):
            yield from _settings(item, f"{path}.{item.get('name', i + 1)}")
    elif isinstance(value, list):
        yield path, str([item.number if isinstance(item, Quantity) else item for item in value])
    else:
        yield path, repr(value.number) + f" {value.unit}" if isinstance(value, Quantity) else str(value)


def _sorted(problems: list[Problem]) -> list[Problem]:
    return sorted(dict.fromkeys(problems), key=lambda p: (p.line is None, p.line or 0))


def _model(tree: Tree, folder: Path, model_code: bool) -> tuple[str, str]:
    """The model's name, and its text where it is the user's own."""
    model = tree.values.get("model", "hepatic-lag")
    if model.endswith(".py"):
        from cohort.study.own_model import own_model

        return own_model(tree, model, folder, model_code)
    if model not in MODELS:
        allowed = ", ".join(name for name in MODELS if "@" not in name)
        tree.problem(
            ("model",), f"{model[:60]!r} is not a model{nearest(model, MODELS)}; one of {allowed}, or a Python file"
        )
        model = "hepatic-lag"
    return model, ""


def _seed(tree: Tree) -> int:
    if "seed" not in tree.values and not any(p.key == "seed" for p in tree.problems):
        tree.problem((), "seed is missing; any whole number >= 0 makes the study repeatable")
    return int(tree.values.get("seed", 0))


def _output(tree: Tree, count: int, protocols: Sequence[Any]) -> Output:
    values = tree.values.get("output", {})
    every = values["every"].number if "every" in values else 5.0
    output = Output(min(values.get("time_courses", 20), count), every)
    points = sum(arm.duration_min / every for arm in protocols) * output.time_courses
    if points > MOST_COURSE_POINTS:
        tree.problem(("output",), f"{points:,.0f} points of time courses; at most {MOST_COURSE_POINTS:,} are allowed")
    return output


# ---- overrides ---------------------------------------------------------------------------------------------------


def _override(tree: dict[str, Any], overrides: Sequence[str]) -> tuple[dict[str, Any], frozenset[KeyPath]]:
    tree = copy.deepcopy(tree) if overrides else tree
    changed: set[KeyPath] = set()
    problems: list[Problem] = []
    for word in overrides:
        key, sign, text = word.partition("=")
        if not sign or not key.strip():
            problems.append(Problem(word[:60], "is not KEY=VALUE, such as subjects.count=500", "--set"))
            continue
        try:
            changed.add(_set(tree, key.strip(), parse_value(text.strip())))
        except (KeyError, ValueError) as error:
            problems.append(Problem(key.strip(), str(error.args[0]), "--set"))
    if problems:
        raise StudyError(problems)
    return tree, frozenset(changed)


def _set(tree: dict[str, Any], key: str, value: Any) -> KeyPath:
    """Put `value` at a dotted key; entries of arms, strata and schedules go by name. Raises KeyError where they do not."""
    if key.count(".") > DEEPEST:
        raise KeyError(f"has {key.count('.') + 1:,} parts; at most {DEEPEST} are allowed")
    node: Any = tree
    path: KeyPath = ()
    rest = key
    while True:
        if isinstance(node, list):
            names = [str(item.get("name", "")) if isinstance(item, dict) else "" for item in node]
            fitting = [n for n in names if n and (rest == n or rest.startswith(n + "."))]
            if not fitting:
                word = rest.split(".")[0]
                known = f"; known: {', '.join(filter(None, names))}" if any(names) else ""
                raise KeyError(f"{dotted(path)} has no entry named {word!r}{nearest(word, names)}{known}")
            name = max(fitting, key=len)
            index = names.index(name)
            node, path, rest = node[index], (*path, index), rest[len(name) + 1 :]
            if not rest:
                raise KeyError("names a whole entry; name one of its keys")
            continue
        part, _, rest = rest.partition(".")
        path = (*path, part)
        if not rest:
            node[part] = value
            return path
        if not isinstance(node.get(part), dict | list):
            node[part] = {}
        node = node[part]
