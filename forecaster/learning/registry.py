"""Trained models on disk: find, read with every check, write.

``models/<name>/<version>/`` holds ``card.json`` (what the model is, SHA-256 of its file),
``settings.toml``, ``verification.json`` and ``model.npz`` (arrays only: reading runs no code).
"""

from __future__ import annotations

import json
import os
import re
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from forecaster.datatypes import ModelIdentity
from forecaster.errors import InputError, ModelError, ModelIntegrityError, ModelNotFoundError
from forecaster.learning.domain import BOUNDING
from forecaster.learning.model import CRITERIA, Model, head_arrays, head_from_arrays
from forecaster.storage import npz_bytes, read_npz, sha256_of, write_atomically

DEFAULT_MODEL = "longcrested"
FORMAT = "trikymia.model/1"
MAX_MODEL_BYTES = 20_000_000
MAX_CARD_BYTES = 1_000_000
PROBES = 24  # rows of features stored with their answers, recomputed whenever a model is read
_NAME = re.compile(r"[a-z][a-z0-9-]{0,39}")
_VERSION = re.compile(r"[0-9]+(\.[0-9]+){0,2}")


@dataclass(frozen=True, slots=True)
class ModelCard:
    """What is installed: identity, folder, one line of summary and the whole card."""

    identity: ModelIdentity
    folder: Path
    summary: str
    card: dict


def models_folder() -> Path:
    """Where shipped models are: beside the package in a checkout, inside it when installed."""
    inside = Path(__file__).resolve().parents[1] / "models"
    return inside if inside.is_dir() else inside.parents[1] / "models"


def _version_key(version: str) -> tuple[int, ...]:
    return tuple(int(part) for part in version.split("."))


def _check_name(identity: ModelIdentity) -> None:
    if not _NAME.fullmatch(identity.name) or not _VERSION.fullmatch(identity.version):
        raise InputError(
            "a model needs a name such as 'north-basin' and a version such as '1.2', "
            f"got {identity.name!r} and {identity.version!r}"
        )


def _read_card(folder: Path) -> ModelCard:
    path = folder / "card.json"
    try:
        if path.stat().st_size > MAX_CARD_BYTES:
            raise ModelIntegrityError(f"{path} is larger than {MAX_CARD_BYTES} bytes")
        card = json.loads(path.read_text(encoding="utf-8"))
        identity = ModelIdentity(
            str(card["name"]), str(card["version"]), str(card["files"]["model.npz"])
        )
        _check_name(identity)
        return ModelCard(identity, folder, str(card["summary"]), card)
    except (OSError, ValueError, KeyError, TypeError) as error:
        raise ModelIntegrityError(
            f"{path} cannot be read as a model card ({error}); install the model again"
        ) from error


def installed_models(folder: Path | None = None) -> tuple[ModelCard, ...]:
    """Cards of all models in a folder (the shipped ones if None), by name and version."""
    root = models_folder() if folder is None else Path(folder)
    cards = [_read_card(path.parent) for path in sorted(root.glob("*/*/card.json"))]
    return tuple(sorted(cards, key=lambda c: (c.identity.name, _version_key(c.identity.version))))


def find_model(name: str | None = None, folder: Path | None = None) -> ModelCard:
    """Card of a model by ``name`` or ``name/version``, or by the path of its folder.

    Raises
    ------
    ModelNotFoundError
        Says what is installed.
    """
    wanted = DEFAULT_MODEL if name is None else str(name)
    if os.path.isfile(os.path.join(wanted, "card.json")):
        return _read_card(Path(wanted))
    base, _, version = wanted.partition("/")
    cards = installed_models(folder)
    found = [
        card for card in cards
        if card.identity.name == base and version in ("", card.identity.version)
    ]  # fmt: skip
    if not found:
        known = ", ".join(f"{c.identity.name}/{c.identity.version}" for c in cards) or "none"
        raise ModelNotFoundError(
            f"no model {wanted!r}; installed: {known} (or give the path of a model's folder)"
        )
    return found[-1]


def load_model(name: str | None = None, folder: Path | None = None) -> Model:
    """Read a model: size, SHA-256, arrays and stored answers are all checked.

    Parameters
    ----------
    name : str or None
        ``name``, ``name/version`` or the path of a model's folder; None for the default.
    folder : path or None
        Where models are; None for the shipped ones.

    Raises
    ------
    ModelNotFoundError, ModelIntegrityError, FeatureMismatchError
    """
    card = find_model(name, folder)
    path = card.folder / "model.npz"
    try:
        if path.stat().st_size > MAX_MODEL_BYTES:
            raise ModelIntegrityError(f"{path} is larger than {MAX_MODEL_BYTES} bytes")
        data = path.read_bytes()
    except OSError as error:
        raise ModelIntegrityError(f"{path} cannot be read ({error})") from error
    digest = sha256_of(data)
    if digest != card.identity.sha256:
        raise ModelIntegrityError(
            f"{path} has SHA-256 {digest}, but its card says {card.identity.sha256}: the file was "
            "altered or damaged; install the model again"
        )
    try:
        arrays = read_npz(data, max_bytes=4 * MAX_MODEL_BYTES)
    except InputError as error:
        raise ModelIntegrityError(f"{path}: {error}") from error
    return _assembled(arrays, card, path)


def _assembled(arrays, card, path) -> Model:
    try:
        if str(arrays["format"]) != FORMAT:
            raise ModelIntegrityError(f"{path} has format {arrays['format']}, not {FORMAT}")
        names = [str(name) for name in arrays["ranges_names"]]
        limits = np.asarray(arrays["ranges_limits"], float).reshape(len(names), 2)
        probe = (
            np.asarray(arrays["probe_features"], np.float32),
            tuple(str(name) for name in arrays["probe_names"]),
        )
        answered = [criterion for criterion in CRITERIA if f"probe_{criterion}" in arrays]
        answers = {c: np.asarray(arrays[f"probe_{c}"], float) for c in answered}
    except (KeyError, TypeError, ValueError) as error:
        raise ModelIntegrityError(f"{path} lacks or garbles {error}") from error
    if not answers or probe[0].ndim != 2 or probe[0].shape[1] != len(probe[1]):
        raise ModelIntegrityError(f"{path} holds no stored answers to check")
    heads = {c: head_from_arrays(arrays, c) for c in answers}
    ranges = {name: (float(a), float(b)) for name, (a, b) in zip(names, limits, strict=True)}
    needed = {*BOUNDING, *(name for head in heads.values() for name in head.names)}
    if not needed <= ranges.keys() or not np.isfinite(limits).all():
        raise ModelIntegrityError(f"{path} does not say in what range each feature was taught")
    model = Model(card.identity, heads, ranges)
    for criterion, expected in answers.items():
        got = _probed(model, *probe, criterion)
        if got.shape != expected.shape or not np.abs(got - expected).max() < 1e-9:
            raise ModelIntegrityError(f"{path} does not reproduce its stored answers")
    return model


def _probed(model, features, names, criterion):
    ratios = np.linspace(*CRITERIA[criterion], 5)
    return model.intervals(features, names, ratios, criterion=criterion).probability


def save_model(
    model: Model, folder, *, probe, names, summary: str, card: dict, settings_toml: str,
    verification: dict | None = None,
) -> ModelCard:  # fmt: skip
    """Write a model below `folder` as ``<name>/<version>/``; refuses to overwrite.

    Parameters
    ----------
    model : Model
    folder : path
    probe : (n, f) array
        Rows of features whose answers are stored and checked on reading.
    names : tuple of str
        Their columns.
    summary : str
        One line.
    card : dict
        More entries of the card: how it was trained, what it was measured to do.
    settings_toml : str
    verification : dict or None
    """
    name, version = model.identity.name, model.identity.version
    _check_name(model.identity)
    place = Path(folder) / name / version
    if (place / "card.json").exists():
        raise ModelError(f"{place} exists; a released version never changes, raise the version")
    place.mkdir(parents=True, exist_ok=True)
    probe = np.asarray(probe, np.float32)[:PROBES]
    arrays = {
        "format": np.array(FORMAT),
        "ranges_names": np.array(list(model.ranges)),
        "ranges_limits": np.array(list(model.ranges.values()), float),
        "probe_features": probe,
        "probe_names": np.array(list(names)),
    }
    for criterion, head in model.heads.items():
        arrays |= head_arrays(head, criterion)
        arrays[f"probe_{criterion}"] = _probed(model, probe, tuple(names), criterion)
    data = npz_bytes(arrays)
    if len(data) > MAX_MODEL_BYTES:
        raise ModelError(f"the model is {len(data)} bytes, more than {MAX_MODEL_BYTES}")
    write_atomically(place / "model.npz", data)
    write_atomically(place / "settings.toml", settings_toml.encode())
    record_verification(place, verification or {})
    text = json.dumps(
        {"name": name, "version": version, "summary": summary, **card,
         "files": {"model.npz": sha256_of(data)}},
        indent=1,
    )  # fmt: skip
    write_atomically(place / "card.json", (text + "\n").encode())
    return _read_card(place)


def read_verification(card: ModelCard) -> dict:
    """What was measured of a model, as `record_verification` wrote it; empty if nothing was."""
    path = card.folder / "verification.json"
    try:
        if path.stat().st_size > MAX_CARD_BYTES:
            raise ModelIntegrityError(f"{path} is larger than {MAX_CARD_BYTES} bytes")
        measured = json.loads(path.read_text(encoding="utf-8"))
    except (OSError, ValueError) as error:
        raise ModelIntegrityError(f"{path} cannot be read ({error})") from error
    if not isinstance(measured, dict):
        raise ModelIntegrityError(f"{path} holds no table of figures")
    return measured


def record_verification(place, verification: dict) -> None:
    """Write what a verification measured beside the model in the folder `place`."""
    text = json.dumps(verification, indent=1, allow_nan=False)
    write_atomically(Path(place) / "verification.json", (text + "\n").encode())
