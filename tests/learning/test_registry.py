import io
import json
import shutil
import zipfile
from dataclasses import replace

import numpy as np
import pytest

from forecaster.datatypes import ModelIdentity
from forecaster.errors import (
    FeatureMismatchError,
    InputError,
    ModelError,
    ModelIntegrityError,
    ModelNotFoundError,
)
from forecaster.learning import registry
from forecaster.learning.model import CRITERIA
from forecaster.learning.registry import (
    find_model,
    installed_models,
    load_model,
    models_folder,
    record_verification,
    save_model,
)
from forecaster.settings import TrainSettings, load_settings
from forecaster.storage import npz_bytes, read_npz, sha256_of
from tests import tiny_model


@pytest.fixture(scope="module")
def kept(tmp_path_factory):
    """A folder of models with the tiny one in it; not to be changed."""
    folder = tmp_path_factory.mktemp("models")
    tiny_model.saved(folder)
    return folder


@pytest.fixture
def models(kept, tmp_path):
    """The same, to be changed."""
    return shutil.copytree(kept, tmp_path / "models")


def tampered(models, change):
    """The arrays of the tiny model changed and its card made to agree: all but the SHA-256 lies."""
    place = models / "tiny" / "1"
    arrays = read_npz(place / "model.npz", max_bytes=10**8)
    change(arrays)
    rewritten(place, npz_bytes(arrays))


def rewritten(place, data):
    (place / "model.npz").write_bytes(data)
    card = json.loads((place / "card.json").read_text())
    card["files"]["model.npz"] = sha256_of(data)
    (place / "card.json").write_text(json.dumps(card))


def recarded(models, change):
    path = models / "tiny" / "1" / "card.json"
    card = json.loads(path.read_text())
    change(card)
    path.write_text(json.dumps(card))


# --- write and read ---


def test_a_model_comes_back_as_it_was(kept):
    model, rows = tiny_model.model(), tiny_model.dataset()
    again = load_model("tiny", kept)
    for criterion, limits in CRITERIA.items():
        ratios = np.linspace(*limits, 9)
        one, other = (
            m.intervals(rows.features[::30], rows.names, ratios, criterion=criterion)
            for m in (model, again)
        )
        assert np.array_equal(one.probability, other.probability)
        assert np.array_equal(one.error, other.error)
    assert again.ranges == model.ranges
    assert again.identity.name == "tiny" and again.identity.version == "1"


def test_the_identity_is_the_hash_of_the_file(kept):
    place = kept / "tiny" / "1"
    assert load_model("tiny", kept).identity.sha256 == sha256_of(place / "model.npz")
    assert find_model("tiny", kept).identity == load_model("tiny", kept).identity


def test_what_lies_in_the_folder(kept):
    place = kept / "tiny" / "1"
    assert sorted(file.name for file in place.iterdir()) == [
        "card.json", "model.npz", "settings.toml", "verification.json",
    ]  # fmt: skip
    assert load_settings(place / "settings.toml", TrainSettings) == tiny_model.SETTINGS
    assert json.loads((place / "verification.json").read_text()) == {}


def test_the_card_keeps_what_it_is_given(tmp_path):
    card = tiny_model.saved(tmp_path, card={"trained_on": ["a", "b"]}, verification={"seas": 3})
    assert card.card["trained_on"] == ["a", "b"]
    assert card.summary == "for tests"
    record_verification(card.folder, {"seas": 4})
    assert json.loads((card.folder / "verification.json").read_text()) == {"seas": 4}
    assert load_model("tiny", tmp_path).identity == card.identity


def test_saving_the_same_model_gives_the_same_bytes(kept, tmp_path):
    tiny_model.saved(tmp_path)
    one, other = ((f / "tiny" / "1" / "model.npz").read_bytes() for f in (kept, tmp_path))
    assert one == other


# --- finding ---


@pytest.mark.parametrize("wanted", ["tiny", "tiny/1"])
def test_a_model_is_found_by_name_and_version(kept, wanted):
    assert find_model(wanted, kept).folder == kept / "tiny" / "1"


def test_a_model_is_found_by_the_path_of_its_folder(kept):
    assert find_model(str(kept / "tiny" / "1")).identity.name == "tiny"


def test_the_newest_version_is_taken(tmp_path):
    for version in ("1.9", "1.10", "1.2.7"):
        model = replace(tiny_model.model(), identity=ModelIdentity("tiny", version, ""))
        rows = tiny_model.dataset()
        save_model(
            model, tmp_path, probe=rows.features[:3], names=rows.names, summary="s", card={},
            settings_toml="",
        )  # fmt: skip
    # by hand: as numbers, 1.10 comes after 1.9
    assert find_model("tiny", tmp_path).identity.version == "1.10"
    versions = [card.identity.version for card in installed_models(tmp_path)]
    assert versions == ["1.2.7", "1.9", "1.10"]


def test_a_missing_model_says_what_is_installed(kept):
    with pytest.raises(ModelNotFoundError, match=r"no model 'tinny'; installed: tiny/1"):
        load_model("tinny", kept)
    with pytest.raises(ModelNotFoundError, match=r"no model 'tiny/2'; installed: tiny/1"):
        load_model("tiny/2", kept)


@pytest.mark.parametrize("name", ["x" * 5000, "tiny\x00", "../tiny/1", ""])
def test_odd_names_are_just_not_found(kept, name):
    with pytest.raises(ModelNotFoundError):
        load_model(name, kept)


def test_no_models_at_all(tmp_path):
    assert installed_models(tmp_path) == ()
    with pytest.raises(ModelNotFoundError, match="installed: none"):
        load_model("tiny", tmp_path)


def test_shipped_models_lie_beside_the_package():
    assert models_folder().name == "models"
    assert models_folder().is_dir()


# --- refusals ---


def test_a_released_version_is_never_overwritten(models):
    before = (models / "tiny" / "1" / "model.npz").read_bytes()
    with pytest.raises(ModelError, match="raise the version"):
        tiny_model.saved(models)
    assert (models / "tiny" / "1" / "model.npz").read_bytes() == before


@pytest.mark.parametrize(
    ("name", "version"), [("Tiny", "1"), ("a/b", "1"), ("../x", "1"), ("tiny", "v1"), ("tiny", "")]
)
def test_names_that_are_no_folders_are_refused(tmp_path, name, version):
    rows = tiny_model.dataset()
    model = replace(tiny_model.model(), identity=ModelIdentity(name, version, ""))
    with pytest.raises(InputError, match="needs a name such as"):
        save_model(
            model, tmp_path, probe=rows.features[:3], names=rows.names, summary="s", card={},
            settings_toml="",
        )  # fmt: skip
    assert not list(tmp_path.iterdir())


@pytest.mark.parametrize("place", [0, 1000, -1])
def test_one_altered_byte_is_refused(models, place):
    path = models / "tiny" / "1" / "model.npz"
    data = bytearray(path.read_bytes())
    data[place] ^= 1
    path.write_bytes(data)
    with pytest.raises(ModelIntegrityError, match="altered or damaged"):
        load_model("tiny", models)


def test_a_file_too_large_is_refused_unread(models, monkeypatch):
    monkeypatch.setattr(registry, "MAX_MODEL_BYTES", 1000)
    with pytest.raises(ModelIntegrityError, match="larger than 1000 bytes"):
        load_model("tiny", models)
    with pytest.raises(ModelError, match="more than 1000"):
        tiny_model.saved(models.parent / "other")


def test_a_file_that_unpacks_to_too_much_is_refused(models):
    # a zip of zeros: small on disk, large unpacked
    buffer, inner = io.BytesIO(), io.BytesIO()
    np.lib.format.write_array(inner, np.zeros(15_000_000))
    with zipfile.ZipFile(buffer, "w", zipfile.ZIP_DEFLATED) as archive:
        archive.writestr("zeros.npy", inner.getvalue())
    assert len(buffer.getvalue()) < registry.MAX_MODEL_BYTES
    rewritten(models / "tiny" / "1", buffer.getvalue())
    with pytest.raises(ModelIntegrityError, match="more than the limit"):
        load_model("tiny", models)


def test_pickled_objects_are_refused_and_not_run(models, tmp_path):
    class Planted:
        def __reduce__(self):
            return (open, (str(tmp_path / "planted"), "w"))

    buffer = io.BytesIO()
    np.savez(buffer, format=np.array([Planted()], dtype=object))
    rewritten(models / "tiny" / "1", buffer.getvalue())
    with pytest.raises(ModelIntegrityError, match="only numbers, booleans and text"):
        load_model("tiny", models)
    assert not (tmp_path / "planted").exists()


def test_something_else_than_arrays_is_refused(models):
    rewritten(models / "tiny" / "1", b"not a zip at all")
    with pytest.raises(ModelIntegrityError, match=r"not a whole \.npz file"):
        load_model("tiny", models)


def _add(name, step):
    def change(arrays):
        arrays[name] = arrays[name] + step

    return change


def _put(name, value):
    def change(arrays):
        arrays[name] = np.asarray(value)

    return change


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (_add("probe_height", 1e-6), "does not reproduce its stored answers"),
        (_add("probe_crest", 1e-6), "does not reproduce"),
        (_add("probe_features", 0.5), "does not reproduce"),
        (_add("height_0_value", 1e-3), "does not reproduce"),
        (_add("crest_line", 1e-3), "does not reproduce"),
        (_put("probe_height", np.full((3, 2), np.nan)), "does not reproduce"),
        (_put("probe_height", "what"), "garbles"),
        (_put("probe_features", np.zeros(4)), "no stored answers"),
        (_put("format", "trikymia.model/9"), "has format trikymia.model/9"),
        (_put("ranges_limits", np.zeros(3)), "garbles"),
        (_add("ranges_limits", np.nan), "in what range"),
        (lambda arrays: arrays.pop("format"), "lacks or garbles 'format'"),
        (lambda arrays: arrays.pop("probe_names"), "lacks or garbles 'probe_names'"),
        (lambda arrays: arrays.pop("height_horizon"), "lacks or garbles 'height_horizon'"),
        (lambda arrays: [arrays.pop(f"probe_{c}") for c in CRITERIA], "no stored answers"),
    ],
)
def test_what_does_not_hang_together_is_refused(models, change, words):
    tampered(models, change)
    with pytest.raises(ModelIntegrityError, match=words):
        load_model("tiny", models)


def test_ranges_of_every_feature_used_are_needed(models):
    def fewer(arrays):
        arrays["ranges_names"] = arrays["ranges_names"][1:]
        arrays["ranges_limits"] = arrays["ranges_limits"][1:]

    tampered(models, fewer)
    with pytest.raises(ModelIntegrityError, match="in what range"):
        load_model("tiny", models)


def test_features_of_another_version_are_refused(models):
    def renamed(arrays):
        names = arrays["height_names"].astype("<U40")
        names[0] = "phase_of_the_moon"
        arrays["height_names"] = names

    tampered(models, renamed)
    with pytest.raises(FeatureMismatchError, match="phase_of_the_moon"):
        load_model("tiny", models)


def test_a_model_of_one_criterion_is_whole(models):
    def heights_only(arrays):
        for name in [name for name in arrays if name.startswith("crest_")]:
            del arrays[name]
        del arrays["probe_crest"]

    tampered(models, heights_only)
    assert tuple(load_model("tiny", models).heads) == ("height",)


@pytest.mark.parametrize(
    "change",
    [
        lambda card: card.pop("name"),
        lambda card: card.pop("files"),
        lambda card: card.pop("summary"),
        lambda card: card.update(files=["model.npz"]),
        lambda card: card.update(version="newest"),
        lambda card: card.update(name="../../tiny"),
    ],
)
def test_a_card_that_lacks_something_is_refused(models, change):
    recarded(models, change)
    for call in (load_model, find_model):
        with pytest.raises(ModelIntegrityError, match="cannot be read as a model card"):
            call("tiny", models)


@pytest.mark.parametrize("data", [b"", b"{", b"[1, 2]", b"\xff\xfe", b'{"name": "tiny"}'])
def test_a_card_that_is_none_is_refused(models, data):
    (models / "tiny" / "1" / "card.json").write_bytes(data)
    with pytest.raises(ModelIntegrityError, match="install the model again"):
        load_model("tiny", models)


def test_a_card_too_large_is_refused(models, monkeypatch):
    monkeypatch.setattr(registry, "MAX_CARD_BYTES", 10)
    with pytest.raises(ModelIntegrityError, match="larger than 10 bytes"):
        load_model("tiny", models)


def test_a_card_without_its_file_is_refused(models):
    (models / "tiny" / "1" / "model.npz").unlink()
    with pytest.raises(ModelIntegrityError, match="cannot be read"):
        load_model("tiny", models)


def test_a_half_written_model_is_not_there(models):
    # the card is written last
    (models / "tiny" / "1" / "card.json").unlink()
    with pytest.raises(ModelNotFoundError):
        load_model("tiny", models)
    tiny_model.saved(models)
    assert load_model("tiny", models).identity.name == "tiny"


def test_the_shipped_model_is_the_default_and_was_verified():
    card = registry.find_model()
    assert card.identity.name == registry.DEFAULT_MODEL
    model = registry.load_model()  # checks its SHA-256 and its stored answers
    assert set(model.heads) == {"height", "crest"}
    measured = registry.read_verification(card)
    pooled = measured["ratios"]["1.6"]["intervals"][0]
    assert pooled["label"] == "pooled" and pooled["seas"] >= 80 and pooled["events"] >= 200


def test_a_damaged_verification_is_refused(tmp_path):
    card = tiny_model.saved(tmp_path)
    (card.folder / "verification.json").write_text("[1")
    with pytest.raises(ModelIntegrityError, match="cannot be read"):
        registry.read_verification(card)
