"""From a config with variants to one complete config for each."""

from __future__ import annotations

import copy
from collections import Counter
from dataclasses import dataclass, replace

import numpy as np

from fitter.config.load import described, raise_all, validate
from fitter.config.model_choice import chosen_model
from fitter.config.parameters import free_parameters
from fitter.config.settings import Config
from fitter.config.variants import folder_name
from fitter.config.yaml_file import Document
from fitter.errors import InputError
from fitter.inference.seeds import child_seed
from fitter.sample.capsule import CapsuleSettings
from fitter.sample.settings import SampleSettings
from fitter.sample.uncertainty.base import is_free

__all__ = ["Variant", "expand", "expand_as_far_as_possible"]

_VARIANT_SEED = 5  # child of the base's seed; the variants' are its children
_MOVED = {"keep": ("sample", "keep"), "uncertainty": ("sample", "uncertainty")}
_ONLY_BASE = ("variants", "compare", "run_folder", "title")


@dataclass(frozen=True)
class Variant:
    """One fit of a comparison.

    Parameters
    ----------
    name, folder : str
        Of the fit, and where it goes inside the comparison's folder.
    config : Config
        Complete, with a seed of its own.
    without : tuple of str
        Labels of uncertainty terms that it leaves out.
    complete_sample : SampleSettings
        The sample before that.
    """

    name: str
    folder: str
    config: Config
    without: tuple[str, ...]
    complete_sample: SampleSettings | CapsuleSettings

    @property
    def data_key(self) -> str:
        """Equal for variants that read the same sample, uncertainty terms left out aside."""
        return self.complete_sample.model_dump_json(by_alias=True)


def expand(config: Config) -> list[Variant]:
    """Return the variants of a config.

    Parameters
    ----------
    config : Config
        The base, with ``variants``.

    Raises
    ------
    InputError, InputErrors
        No variants, a name given twice, an unknown reference, or anything wrong with one of them, with its row.
    """
    variants, problems = expand_as_far_as_possible(config)
    raise_all(problems)
    return variants


def expand_as_far_as_possible(config: Config) -> tuple[list[Variant], list[InputError]]:
    """Return the variants that are right, and what is wrong with the others or with the list."""
    problems: list[InputError] = _name_problems(config)
    variants: list[Variant] = []
    used: set[str] = set()
    for i in range(len(config.variants)):
        document, known = _document(config, i)
        used |= known
        found, complete, wrong = validate(document, config.folder, allow_code=config._allow_code)
        without = config.variants[i].without
        if found is not None and without and complete is not None:
            document, wrong = _without(document, complete, without, config, i)
            found, _, more = validate(document, config.folder, allow_code=config._allow_code)
            wrong += more
        problems += wrong
        if found is not None and complete is not None and not wrong:
            name = config.variants[i].name
            variants.append(Variant(name, folder_name(i, name), found, tuple(without), complete))
    unused = [n for n in config.document.data.get("parameters") or {} if n not in used]
    cure = "Remove it, or add a variant whose model has it"
    problems += [config.document.error("no variant has this parameter", ("parameters", n), cure=cure) for n in unused]
    # What is wrong with the base is wrong with each variant: once is enough.
    return variants, list({str(p): p for p in problems}.values())


def _name_problems(config: Config) -> list[InputError]:
    document, names = config.document, [v.name for v in config.variants]
    if len(names) < 2:
        cure = "Add `variants:`, a list such as [{name: flat, model: flat_lcdm}, {name: curved, model: curved_lcdm}]"
        return [document.error("a comparison needs two variants or more", ("variants",), cure=cure)]
    problems = [
        document.error("two variants have the same name", ("variants", i, "name"), value=n)
        for i, n in enumerate(names)
        if Counter(names)[n] > 1 and names.index(n) != i
    ]
    reference = config.compare.reference
    if reference is not None and reference not in names:
        cure = f"Choose one of {', '.join(names)}"
        problems.append(document.error("there is no such variant", ("compare", "reference"), value=reference, cure=cure))
    return problems


def _document(config: Config, i: int) -> tuple[Document, set[str]]:
    """The settings of variant `i`, with the row of each key; and which of the base's parameters it has."""
    base, variant = config.document.data, config.document.data["variants"][i]
    data = {k: copy.deepcopy(v) for k, v in base.items() if k not in _ONLY_BASE}
    data["title"] = f"{base['title']}: {variant['name']}" if base.get("title") else str(variant["name"])
    data |= {k: variant[k] for k in ("model", "radiation") if variant.get(k) is not None}
    if variant.get("keep") is not None and isinstance(data.get("sample"), dict):
        data["sample"]["keep"] = {**(data["sample"].get("keep") or {}), **variant["keep"]}
    if variant.get("uncertainty") is not None and isinstance(data.get("sample"), dict):
        data["sample"]["uncertainty"] = variant["uncertainty"]
    seed = child_seed(np.random.SeedSequence(config.sampling.seed), _VARIANT_SEED, i).generate_state(1)[0]
    data["sampling"] = {**(data.get("sampling") or {}), "seed": int(seed), **(variant.get("sampling") or {})}
    lines = {place: row for path, row in config.document.lines.items() if (place := _place(path, i)) is not None}
    document = Document(data, lines, config.document.path)
    given, known = base.get("parameters") or {}, _known(config, document)
    kept = {n: v for n, v in given.items() if known is None or n in known}
    data["parameters"] = kept | (variant.get("parameters") or {})
    return document, set(kept)


def _without(
    document: Document, complete: SampleSettings | CapsuleSettings, labels: list[str], config: Config, i: int
) -> tuple[Document, list[InputError]]:
    """The document with some uncertainty terms removed from its list."""
    names = term_labels(complete)
    keys = ("variants", i, "without")
    cure = f"The labels are: {', '.join(n for n in names if n)}"
    wrong = [config.document.error("no uncertainty term has this label", keys, value=w, cure=cure) for w in labels if w not in names]
    sample = document.data["sample"]
    kept = [term for term, name in zip(sample["uncertainty"], names, strict=True) if name not in labels]
    if not kept:
        wrong.append(config.document.error("no uncertainty term is left", keys, value=labels, cure=cure))
    return replace(document, data={**document.data, "sample": {**sample, "uncertainty": kept or sample["uncertainty"]}}), wrong


def term_labels(sample: SampleSettings | CapsuleSettings) -> list[str | None]:
    """Label of each uncertainty term, numbered where several have the same; None for a free parameter, which is no term."""
    labels: list[str | None] = []
    seen: Counter[str] = Counter()
    for item in sample.uncertainty:
        if item.kind == "covariance_scale" or (item.kind == "intrinsic" and is_free(getattr(item, "intrinsic", None))):
            labels.append(None)
            continue
        label = item.label or item.default_label()
        seen[label] += 1
        labels.append(label if seen[label] == 1 else f"{label} {seen[label]}")
    return labels


def _known(config: Config, document: Document) -> set[str] | None:
    """Names that the variant's model and data have; None where that cannot be told."""
    model, _ = chosen_model(document, config.folder, config._allow_code)
    if model is None:
        return None
    sample = described(config.sample, config.folder)
    scale, kind = (sample.distance_scale, sample.data_kind) if sample is not None else ("calibrated", "magnitude")
    return set(free_parameters(model, scale, kind))


def _place(path: tuple, i: int) -> tuple | None:
    """Where a key of the file stands in the settings of variant `i`; None for those of other variants."""
    if path[:1] != ("variants",):
        return path
    if len(path) < 3 or path[1] != i:
        return None
    return (*_MOVED.get(path[2], (path[2],)), *path[3:])
