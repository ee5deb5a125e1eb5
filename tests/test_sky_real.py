"""The real sky through the readers: the 408 MHz survey and a global model's output, against published values.

Both stand in packages as data files, found without importing the packages:
`mwa_skymap` carries the survey of Haslam et al. 1982 (A&AS 47, 1) as a B1950 image, and
`pyradiosky` a sky model in HDF5 from 50 to 150 MHz.
"""

from __future__ import annotations

import importlib.util
from pathlib import Path
from typing import Any

import h5py
import healpy
import numpy as np
import pytest
from astropy.coordinates import SkyCoord
from numpy.typing import NDArray

from sims.config import ImageSky
from sims.errors import InputError
from sims.sky import DiffuseSky, sky_from
from sims.sky_images import SkyImage, read_image
from sims.sky_maps import read_image_map

DECLARED: dict[str, Any] = {"frame": "fk4", "unit": "0.1 K", "missing": "refuse"}


def package_file(package: str, name: str) -> Path:
    spec = importlib.util.find_spec(package)
    assert spec is not None, f"{package} is a test dependency: pip install --no-deps {package}"
    assert spec.origin is not None
    path = Path(spec.origin).parent / "data" / name
    assert path.is_file(), path
    return path


@pytest.fixture(scope="module")
def survey_file() -> Path:
    return package_file("mwa_skymap", "radio408.RaDec.fits")


@pytest.fixture(scope="module")
def image(survey_file: Path) -> SkyImage:
    return read_image(survey_file, **DECLARED)


@pytest.fixture(scope="module")
def sky(survey_file: Path) -> DiffuseSky:
    settings = {
        "kind": "image", "file": survey_file, **DECLARED, "nside": 64, "frequency_mhz": 408.0, "index": 2.5,
        "valid_from_mhz": 40.0, "valid_to_mhz": 408.0,
    }  # fmt: skip
    return sky_from(ImageSky.model_validate(settings))


def galactic_of(image: SkyImage, row: int, column: int) -> tuple[float, float]:
    place = SkyCoord(image.longitude_deg[column], image.latitude_deg[row], unit="deg", frame="fk4").galactic
    return float(place.l.deg), float(place.b.deg)


def brightest_near(image: SkyImage, ra_deg: float, dec_deg: float) -> tuple[float, float, float]:
    """Peak, K, within 2 deg of a J2000 place, and its J2000 place, deg."""
    longitude, latitude = np.meshgrid(image.longitude_deg, image.latitude_deg)
    cells = healpy.ang2vec(longitude.ravel(), latitude.ravel(), lonlat=True)
    b1950 = SkyCoord(ra_deg, dec_deg, unit="deg", frame="fk5").fk4
    centre = healpy.ang2vec(b1950.ra.deg, b1950.dec.deg, lonlat=True)
    inside = np.flatnonzero(cells @ centre > np.cos(np.radians(2.0)))
    peak = inside[np.argmax(image.temperature_k.ravel()[inside])]
    place = SkyCoord(longitude.ravel()[peak], latitude.ravel()[peak], unit="deg", frame="fk4").fk5
    return float(image.temperature_k.ravel()[peak]), float(place.ra.deg), float(place.dec.deg)


def test_survey_image_loses_only_its_seam_column(image: SkyImage) -> None:
    assert image.temperature_k.shape == (541, 1080)
    assert image.filled_cells == 0


def test_survey_mean_and_range(image: SkyImage) -> None:
    # Computed from the file by numpy alone: cos(declination) weights over 1080 columns, 34.734 K to its last figure.
    assert image.mean_k() == pytest.approx(34.734, abs=6e-4)
    assert image.temperature_k.min() == pytest.approx(10.6465, abs=5e-5)
    assert image.temperature_k.max() == pytest.approx(4814.5, abs=0.05)


@pytest.mark.parametrize("nside", [16, 64, 128])
def test_averaging_onto_healpix_keeps_the_mean(survey_file: Path, image: SkyImage, nside: int) -> None:
    found = read_image_map(survey_file, nside=nside, **DECLARED).temperature_k
    # Children of at most a quarter of a cell hold the mean to 1e-3 K on the real sky.
    assert found.mean() == pytest.approx(image.mean_k(), abs=1e-3)
    assert image.temperature_k.min() <= found.min()
    assert found.max() <= image.temperature_k.max()


def test_minimum_and_maximum_stand_where_they_should(image: SkyImage) -> None:
    columns = image.temperature_k.shape[1]
    coldest = galactic_of(image, *divmod(int(image.temperature_k.argmin()), columns))
    assert coldest == pytest.approx((198.25, 48.71), abs=0.005)  # the figures of the value, computed with astropy
    brightest = galactic_of(image, *divmod(int(image.temperature_k.argmax()), columns))
    assert brightest == pytest.approx((111.80, -2.02), abs=0.005)


@pytest.mark.parametrize(
    ("name", "ra_deg", "dec_deg", "peak_k"),
    [
        # Positions J2000, from memory of the usual catalogues; to a cell of 1/3 deg nothing finer is needed.
        ("Cas A", 350.86, 58.81, 4814.5),
        ("Cyg A", 299.87, 40.73, 2954.0),
    ],
)
def test_sources_stand_at_their_b1950_places(
    image: SkyImage, name: str, ra_deg: float, dec_deg: float, peak_k: float
) -> None:
    found_k, ra_found, dec_found = brightest_near(image, ra_deg, dec_deg)
    assert found_k == pytest.approx(peak_k, abs=0.5)
    # Half a cell of 1/3 deg each way. Taking B1950 for J2000 moves either by over 0.25 deg in right ascension.
    assert abs(dec_found - dec_deg) < 0.18
    assert abs(ra_found - ra_deg) * np.cos(np.radians(dec_deg)) < 0.18


def test_brightest_pixel_of_the_sky_object_is_cas_a_in_icrs(sky: DiffuseSky) -> None:
    brightest = sky.directions[int(sky.brightness_k([408.0])[:, 0].argmax())]
    cas_a = healpy.ang2vec(350.86, 58.81, lonlat=True)
    # Within a pixel of 0.92 deg: its centre is at most 0.75 deg from any point in it.
    assert np.degrees(np.arccos(brightest @ cas_a)) < 0.75


def test_north_galactic_pole(image: SkyImage) -> None:
    pole = SkyCoord(0.0, 90.0, unit="deg", frame="galactic").fk4
    column = int(np.rint((pole.ra.deg - image.longitude_deg[0]) / np.diff(image.longitude_deg)[0])) % 1080
    row = int(np.argmin(np.abs(image.latitude_deg - pole.dec.deg)))
    # 20.3 K to its last figure, and the survey varies there by about 0.2 K from cell to cell.
    assert image.temperature_k[row, column] == pytest.approx(20.3, abs=0.25)


def model() -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    with h5py.File(package_file("pyradiosky", "gsm_icrs.skyh5"), "r") as file:
        return file["Header/freq_array"][:] / 1e6, file["Data/stokes"][0]


def test_global_model_has_its_published_means() -> None:
    frequency_mhz, temperature_k = model()
    expected = {50.0: 6184.4099, 72.2222: 2551.5481, 105.5556: 1005.9474, 150.0: 418.6039}
    for frequency, mean in expected.items():
        place = int(np.argmin(np.abs(frequency_mhz - frequency)))
        assert temperature_k[place].mean() == pytest.approx(mean, abs=6e-5)


def test_survey_scaled_down_agrees_with_the_global_model(sky: DiffuseSky) -> None:
    frequency_mhz, temperature_k = model()
    band = (frequency_mhz >= 50.0) & (frequency_mhz <= 150.0)
    ratio = temperature_k.mean(axis=1)[band] / sky.mean_k(frequency_mhz[band])
    # The survey's scale is known to 5-10 % and its zero level to 3 K of 35 K (Haslam et al. 1982).
    assert np.abs(ratio - 1.0).max() < 0.10
    at_100 = float(np.exp(np.interp(np.log(100.0), np.log(frequency_mhz), np.log(temperature_k.mean(axis=1)))))
    # 0.984 was computed with f^-2.5 of the whole map. Keeping the CMB out of the power law lowers the scaled map
    # by 2.7 K of 34.7 K at 408 MHz, 7.6 % of it, and adds 2.7 K back at 100 MHz, 0.2 %.
    share = 2.7157 / 34.734
    expected = 0.984 / (1.0 - share + share * (100.0 / 408.0) ** 2.5)
    assert at_100 / sky.mean_k([100.0])[0] == pytest.approx(expected, abs=0.002)


def test_model_and_survey_agree_on_where_the_sky_is_bright(sky: DiffuseSky) -> None:
    _, temperature_k = model()
    survey = np.log(sky.brightness_k([100.0])[:, 0])
    model_pixel = healpy.vec2pix(8, *sky.directions.T)
    mean = np.bincount(model_pixel, weights=survey) / np.bincount(model_pixel)
    # The model rests on this survey among others; mirrored or in the wrong frame the two would not correlate.
    assert np.corrcoef(mean, np.log(temperature_k[5]))[0, 1] > 0.97
    mirrored = healpy.vec2pix(8, sky.directions[:, 0], -sky.directions[:, 1], sky.directions[:, 2])
    wrong = np.bincount(mirrored, weights=survey) / np.bincount(mirrored)
    assert np.corrcoef(wrong, np.log(temperature_k[5]))[0, 1] < 0.7


def test_survey_scaled_down_agrees_with_median_galactic_noise(sky: DiffuseSky) -> None:
    frequency_mhz = np.array([60.0, 70.0, 80.0, 90.0, 100.0])
    # ITU-R P.372-16 eq. 13: F_am = 52 - 23 log10(f/MHz) dB over 290 K, a median that an antenna on the ground meets.
    galactic_k = 290.0 * 10.0 ** (0.1 * (52.0 - 23.0 * np.log10(frequency_mhz)))
    ratio = sky.mean_k(frequency_mhz) / galactic_k
    # A line of one slope through decades of frequency; 1 dB of 26 % is the last figure of such curves.
    assert np.abs(ratio - 1.0).max() < 0.25


@pytest.mark.parametrize(
    ("changes", "word"),
    [({"frame": "fk5"}, "EPOCH"), ({"frame": "galactic"}, "CTYPE1"), ({"unit": "Jy"}, "unit"), ({"nside": 256}, "256")],
)
def test_the_survey_declared_wrongly_is_refused(survey_file: Path, changes: dict[str, Any], word: str) -> None:
    with pytest.raises(InputError, match=word):
        read_image_map(survey_file, **{**DECLARED, "nside": 64, **changes})
