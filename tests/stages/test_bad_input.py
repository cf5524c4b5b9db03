"""Bad input ends in one message and leaves nothing behind.

A message that names the map or file, exit code 2,
and no partial product under a final name.
"""

from __future__ import annotations

import copy
import hashlib
import shutil
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from astropy.io import fits
from helpers import demo_recipe

from kspipe.core.errors import (
    BeamError,
    GridError,
    InputError,
    MapError,
    OutputError,
    RecipeError,
)
from kspipe.recipe import parse_recipe
from kspipe.stages.compare import compare_relations
from kspipe.stages.reduce import reduce_maps


@dataclass
class Job:
    """A recipe with maps of its own, and where its products go."""

    folder: Path
    raw: dict[str, Any]
    out: Path = field(init=False)

    def __post_init__(self) -> None:
        self.out = self.folder / "products" / "of this run"

    def reduce(self, out: Path | None = None, **options: Any) -> bool:
        return reduce_maps(parse_recipe(self.raw, folder=self.folder), out or self.out, **options)

    def edit(self, name: str, change: Callable[[fits.PrimaryHDU], None]) -> None:
        """Change a copy of one file in place."""
        hdu = fits.open(self.folder / name)[0]
        data, header = hdu.data.copy(), hdu.header.copy()
        fresh = fits.PrimaryHDU(data, header)
        change(fresh)
        (self.folder / name).unlink()
        fresh.writeto(self.folder / name, output_verify="ignore")


def make_job(folder: Path) -> Job:
    return Job(folder, demo_recipe(folder, grid={"beam": "40 arcsec"}))  # coarse and quick


@pytest.fixture
def job(tmp_path) -> Job:
    return make_job(tmp_path)


@pytest.fixture(scope="module")
def pristine(tmp_path_factory) -> tuple[Job, Path]:
    """A reduction, and a copy of everything that belongs to it."""
    job = make_job(tmp_path_factory.mktemp("reduced"))
    assert job.reduce()
    copied = tmp_path_factory.mktemp("copy") / "of it"
    shutil.copytree(job.folder, copied)
    return job, copied


@pytest.fixture
def reduced(pristine) -> Job:
    """A job that was reduced, as it was then; its recipe names its files by absolute paths."""
    job, copied = pristine
    shutil.rmtree(job.folder)
    shutil.copytree(copied, job.folder)
    return Job(job.folder, copy.deepcopy(job.raw))


def contents(folder: Path) -> dict[str, str]:
    return {
        path.relative_to(folder).as_posix(): hashlib.sha256(path.read_bytes()).hexdigest()
        for path in sorted(folder.rglob("*"))
        if path.is_file()
    }


def set_cards(**cards: Any) -> Callable[[fits.PrimaryHDU], None]:
    def change(hdu: fits.PrimaryHDU) -> None:
        for key, value in cards.items():
            if value is None:
                del hdu.header[f"{key}*"]
            else:
                hdu.header[key] = value

    return change


# --- What goes wrong with a map ----------------------------------------------------------------


def missing_file(job: Job) -> None:
    (job.folder / "co.fits").unlink()


def no_wcs(job: Job) -> None:
    job.edit("co.fits", set_cards(CTYPE=None))


def no_pixel_size(job: Job) -> None:
    job.edit("co.fits", set_cards(CDELT=None, PC=None, CD=None))


def no_unit(job: Job) -> None:
    del job.raw["maps"]["fuv"]["unit"]


def wrong_unit(job: Job) -> None:
    job.edit("co.fits", set_cards(BUNIT="MJy/sr"))


def no_beam(job: Job) -> None:
    job.edit("co.fits", set_cards(BMAJ=None))


def beam_in_arcsec(job: Job) -> None:
    job.edit("co.fits", set_cards(BMAJ=11.5, BMIN=11.5))


def no_velocity(job: Job) -> None:
    del job.raw["galaxy"]["velocity"]
    job.edit("hi.fits", set_cards(CTYPE3=None, CUNIT3=None, CRVAL3=None))


def wrong_velocity(job: Job) -> None:
    job.raw["galaxy"]["velocity"] = "6400 km/s"


def too_sharp(job: Job) -> None:
    job.raw["grid"]["beam"] = "12 arcsec"


def no_overlap(job: Job) -> None:
    job.edit("co.fits", set_cards(CRVAL1=49.1))


def centre_elsewhere(job: Job) -> None:
    job.raw["galaxy"]["centre"] = "13h33m38.4s +21d46m12s"


def noise_of_another_shape(job: Job) -> None:
    def cut(hdu: fits.PrimaryHDU) -> None:
        hdu.data = hdu.data[..., :-1]

    job.edit("mir24_noise.fits", cut)


def noise_not_positive(job: Job) -> None:
    def zero(hdu: fits.PrimaryHDU) -> None:
        hdu.data[40, 50] = 0.0

    job.edit("mir24_noise.fits", zero)


def noise_negative(job: Job) -> None:
    def negative(hdu: fits.PrimaryHDU) -> None:
        hdu.data[40, 50] *= -1

    job.edit("mir24_noise.fits", negative)


def masked_zeros(job: Job) -> None:
    def mask(hdu: fits.PrimaryHDU) -> None:
        hdu.data[:40] = 0.0

    job.edit("mir24.fits", mask)


def nothing_finite(job: Job) -> None:
    def blank(hdu: fits.PrimaryHDU) -> None:
        hdu.data[:] = np.nan

    job.edit("mir24.fits", blank)


def no_blank_sky(job: Job) -> None:
    job.raw["galaxy"]["r25"] = "6 arcmin"


def not_fits(job: Job) -> None:
    (job.folder / "co.fits").write_text("x y intensity\n" * 500, encoding="ascii")


def truncated_header(job: Job) -> None:
    file = job.folder / "co.fits"
    file.write_bytes(file.read_bytes()[:1500])


def truncated_data(job: Job) -> None:
    file = job.folder / "co.fits"
    file.write_bytes(file.read_bytes()[: file.stat().st_size // 2])


def truncated_noise(job: Job) -> None:
    file = job.folder / "mir24_noise.fits"
    file.write_bytes(file.read_bytes()[: file.stat().st_size // 2])


def a_cube(job: Job) -> None:
    def stack(hdu: fits.PrimaryHDU) -> None:
        hdu.data = np.stack([hdu.data, hdu.data])

    job.edit("co.fits", stack)


def several_images(job: Job) -> None:
    with fits.open(job.folder / "co.fits") as hdus:
        two = [fits.ImageHDU(hdus[0].data, hdus[0].header, name) for name in ("MOM0", "EMOM0")]
        fits.HDUList([fits.PrimaryHDU(), *two]).writeto(job.folder / "both.fits")
    job.raw["maps"]["co"]["file"] = "both.fits"


# Headers are read for all maps before anything is said: their faults come as one MapError.
BAD: dict[Callable[[Job], None], tuple[type[InputError], str]] = {
    missing_file: (RecipeError, r"maps\.co\.file.*co\.fits does not exist"),
    no_wcs: (MapError, r"maps\.co.*co\.fits.*no sky coordinates"),
    no_pixel_size: (MapError, r"maps\.co.*co\.fits.*no pixel size"),
    no_unit: (MapError, r"maps\.fuv.*fuv\.fits.*no unit"),
    wrong_unit: (MapError, r"maps\.co.*co\.fits.*'MJy/sr'.*CO\(2-1\)"),
    no_beam: (MapError, r"maps\.co.*co\.fits.*no beam"),
    beam_in_arcsec: (MapError, r"maps\.co.*co\.fits.*degrees"),
    no_velocity: (MapError, r"maps\.hi.*hi\.fits.*galaxy\.velocity"),
    wrong_velocity: (MapError, r"maps\.hi.*hi\.fits.*galaxy\.velocity"),
    noise_of_another_shape: (MapError, r"maps\.ir\.noise.*mir24_noise\.fits.*227 x 232"),
    several_images: (MapError, r"both\.fits.*1 MOM0, 2 EMOM0.*hdu = N"),
    a_cube: (MapError, r"co\.fits.*cube"),
    not_fits: (MapError, r"co\.fits.*cannot be read as FITS"),
    truncated_header: (MapError, r"co\.fits.*cannot be read"),
    truncated_data: (MapError, r"co\.fits"),
    truncated_noise: (MapError, r"mir24_noise\.fits"),
    too_sharp: (BeamError, r'maps\.hi.*hi\.fits(?s:.*)grid\.beam = "13\.4'),
    no_overlap: (GridError, r"maps\.co.*does not reach the galaxy's centre"),
    centre_elsewhere: (GridError, r"(?s)maps\.hi.*maps\.co.*maps\.fuv.*maps\.ir.*galaxy\.centre"),
    noise_not_positive: (MapError, r"maps\.ir\.noise.*mir24_noise\.fits.*1 pixels"),
    noise_negative: (MapError, r"maps\.ir\.noise.*mir24_noise\.fits.*1 pixels"),
    masked_zeros: (MapError, r'maps\.ir.*mir24\.fits.*exactly zero.*zeros = "blank"'),
    nothing_finite: (MapError, r"maps\.ir.*mir24\.fits.*no pixel"),
    no_blank_sky: (MapError, r"maps\.co\.noise.*blank sky"),
}


@pytest.mark.parametrize("spoil", BAD, ids=lambda spoil: spoil.__name__)
def test_bad_maps_leave_nothing_behind(job, spoil) -> None:
    kind, message = BAD[spoil]
    spoil(job)
    before = contents(job.folder)
    with pytest.raises(kind, match=message) as caught:
        job.reduce()
    assert caught.value.exit_code == 2
    assert isinstance(caught.value, InputError)
    # Each fault says where, and nothing of a program's insides.
    assert all(line.startswith("[") for line in str(caught.value).splitlines())
    assert not any(word in str(caught.value) for word in ("Traceback", ".py", "Error:"))
    assert contents(job.folder) == before
    assert not job.out.exists()


def test_not_even_an_empty_folder_is_left_behind(job) -> None:
    """A folder made for the products goes with them, and so does the one above it."""
    nothing_finite(job)
    with pytest.raises(MapError):
        job.reduce()
    assert not job.out.parent.exists()


@pytest.mark.parametrize("spoil", [no_beam, noise_negative, truncated_data])
def test_bad_maps_leave_an_older_reduction_as_it_was(reduced, spoil) -> None:
    before = contents(reduced.out)
    spoil(reduced)
    with pytest.raises(InputError):
        reduced.reduce(overwrite=True)
    assert contents(reduced.out) == before
    assert sorted(path.name for path in reduced.out.iterdir() if path.name.startswith(".")) == []


def test_faults_of_several_maps_come_together(job) -> None:
    no_beam(job)
    no_unit(job)
    job.edit("mir24.fits", set_cards(BUNIT="flux"))
    with pytest.raises(MapError, match=r"(?s)maps\.co.*maps\.fuv.*maps\.ir"):
        job.reduce()


# --- What goes wrong with the folder -----------------------------------------------------------


def test_a_folder_that_cannot_be_made(job) -> None:
    """Below a regular file nobody can make a folder, not even root."""
    file = job.folder / "a file"
    file.write_text("mine", encoding="ascii")
    for out in (file, file / "products", file / "deep" / "products"):
        with pytest.raises(OutputError, match="a file") as caught:
            job.reduce(out)
        assert caught.value.exit_code == 2
    assert file.read_text(encoding="ascii") == "mine"


def test_a_foreign_folder_is_left_alone(job) -> None:
    job.out.mkdir(parents=True)
    (job.out / "thesis.tex").write_text("years of work", encoding="ascii")
    with pytest.raises(OutputError, match="not made by kspipe"):
        job.reduce()
    assert contents(job.out) == {"thesis.tex": contents(job.out)["thesis.tex"]}
    assert job.reduce(overwrite=True)
    assert (job.out / "thesis.tex").read_text(encoding="ascii") == "years of work"


def test_products_of_another_recipe_are_not_replaced(reduced) -> None:
    before = contents(reduced.out)
    reduced.raw["grid"]["beam"] = "45 arcsec"
    with pytest.raises(OutputError, match=r"other inputs.*--overwrite"):
        reduced.reduce()
    assert contents(reduced.out) == before
    assert reduced.reduce(overwrite=True)
    assert contents(reduced.out) != before


@pytest.mark.parametrize("text", ["{", "[]", '{"stages": 3}', '{"stages": {"convert": 1}}'])
def test_a_damaged_manifest_is_a_message(reduced, text) -> None:
    (reduced.out / "manifest.json").write_text(text, encoding="utf-8")
    before = contents(reduced.out)
    with pytest.raises(OutputError, match=r"manifest\.json|not made by kspipe"):
        reduced.reduce()
    with pytest.raises(OutputError):
        compare_relations(reduced.out)
    assert contents(reduced.out) == before


def test_nothing_to_compare(job) -> None:
    for out in (job.out, job.folder):
        with pytest.raises(OutputError, match="holds no reduction") as caught:
            compare_relations(out)
        assert caught.value.exit_code == 2
    assert not job.out.exists()


def edit_pixel(hdu: fits.PrimaryHDU) -> None:
    hdu.data[100, 100] *= 1.001


def stale_map(job: Job) -> None:
    job.edit("mir24.fits", edit_pixel)


def stale_noise(job: Job) -> None:
    job.edit("mir24_noise.fits", edit_pixel)


def stale_recipe(job: Job) -> None:
    recipe = job.out / "recipe.toml"
    text = recipe.read_text(encoding="utf-8")
    assert "line_ratio = 0.65" in text
    recipe.write_text(text.replace("line_ratio = 0.65", "line_ratio = 0.7"), encoding="utf-8")


def gone_map(job: Job) -> None:
    (job.folder / "mir24.fits").unlink()


def edited_product(job: Job) -> None:
    file = job.out / "matched" / "hi.fits"
    data = bytearray(file.read_bytes())
    data[-3000] ^= 1
    file.write_bytes(bytes(data))


def gone_product(job: Job) -> None:
    (job.out / "matched" / "hi.fits").unlink()


@pytest.mark.parametrize(
    ("spoil", "message"),
    [
        (stale_map, "stale"),
        (stale_noise, "stale"),
        (stale_recipe, "stale"),
        (gone_map, r"mir24\.fits"),
        (edited_product, "changed by hand"),
        (gone_product, "changed by hand"),
    ],
    ids=lambda value: getattr(value, "__name__", None),
)
def test_a_stale_reduction_is_not_compared(reduced, spoil, message) -> None:
    # One changed input pixel is reported.
    spoil(reduced)
    before = contents(reduced.out)
    with pytest.raises(InputError, match=message) as caught:
        compare_relations(reduced.out)
    assert caught.value.exit_code == 2
    assert contents(reduced.out) == before


def test_an_unchanged_reduction_is_reused(reduced) -> None:
    assert compare_relations(reduced.out)
    before = contents(reduced.out)
    assert not reduced.reduce()
    assert not compare_relations(reduced.out)
    assert contents(reduced.out) == before


@pytest.mark.parametrize("moment", ["matching", "publishing"])
def test_a_run_killed_half_way_leaves_no_half_product(job, moment, monkeypatch) -> None:
    def killed(*_: Any, **__: Any) -> None:
        raise KeyboardInterrupt

    target = {
        "matching": "kspipe.stages.reduce.surfaces_of",
        "publishing": "kspipe.stages.folder.file_checksum",
    }[moment]
    with monkeypatch.context() as patch:
        if moment == "publishing":
            # Fingerprints of the inputs come first: the outputs' are the ones to fail.
            from kspipe.stages import folder, plan

            patch.setattr(plan, "file_checksum", folder.file_checksum)
        patch.setattr(target, killed)
        with pytest.raises(KeyboardInterrupt):
            job.reduce()
    assert not job.out.exists() or contents(job.out) == {}
    assert job.reduce()
