"""Makes tests/data/models from the tables of the pypeit 1.15.0 source distribution.

    python tests/data/make_extracts.py STANDARDS_FOLDER

where STANDARDS_FOLDER is pypeit/data/standards of the unpacked distribution. Needs numpy and astropy.
Every table keeps the rows from 3 500 to 7 100 A of its source, unchanged, and is written with fixed
time stamps, so that equal input gives equal bytes.
"""

import gzip
import io
import pathlib
import sys

import numpy as np
from astropy.io import fits

RANGE_AA = (3500.0, 7100.0)
ERG = "erg/s/cm2/Angstrom"

# name, source file, is vacuum, factor to erg/s/cm2/A, effective temperature, log g, name of the model
MODELS = [
    ("g191b2b", "calspec/g191b2b_mod_005.fits.gz", True, 1.0, 61100.0, 7.4),
    ("gd153", "calspec/gd153_mod_005.fits.gz", True, 1.0, 38600.0, 7.6),
    ("gd71", "calspec/gd71_mod_006.fits.gz", True, 1.0, 32700.0, 7.6),
    ("hz43", "calspec/hz43_mod_005.fits.gz", True, 1.0, 50800.0, 7.9),
    ("wd1057_719", "calspec/wd1057_719_mod_001.fits.gz", True, 1.0, 41400.0, 7.8),
    ("wd1657_343", "calspec/wd1657_343_mod_001.fits.gz", True, 1.0, 53000.0, 7.7),
    ("eg274_air", "xshooter/fEG274.dat", False, 1.0, None, None),
    ("ltt3218_air", "xshooter/fLTT3218.dat", False, 1.0, None, None),
    ("ltt7987_air", "xshooter/fLTT7987.dat", False, 1.0, None, None),
    ("gd153_air", "xshooter/fGD153.dat", False, 1.0, None, None),
    ("gd71_air", "xshooter/fGD71.dat", False, 1.0, None, None),
    ("bpm16274", "esofil/fbpm16274.dat", True, 1e-16, None, None),
]


def read(path):
    if path.name.endswith(".fits.gz"):
        with fits.open(path) as hdus:
            history = [str(line) for line in hdus[0].header["HISTORY"]]
            table = hdus[1].data
            return np.array(table["WAVELENGTH"], "f4"), np.array(table["FLUX"], "f4"), history
    columns = np.loadtxt(path)
    return columns[:, 0], columns[:, 1], []


def main():
    standards = pathlib.Path(sys.argv[1])
    folder = pathlib.Path(__file__).parent / "models"
    for name, source, is_vacuum, factor, teff_k, log_g in MODELS:
        wave, flux, history = read(standards / source)
        keep = (wave >= RANGE_AA[0]) & (wave <= RANGE_AA[1])
        wave, flux = wave[keep], flux[keep] * factor
        # The history names the model: t327g76n is 32 700 K, log g 7.6.
        named = [word for line in history for word in line.split() if word.startswith("t") and "n.sp" in word]
        columns = [
            fits.Column("wave", "D" if wave.dtype == np.float64 else "E", "Angstrom", array=wave),
            fits.Column("flux", "E", ERG, array=flux.astype("f4")),
        ]
        table = fits.BinTableHDU.from_columns(columns)
        table.header["EXTNAME"] = "MODEL"
        primary = fits.PrimaryHDU()
        primary.header["OBJECT"] = name.split("_air")[0].upper()
        primary.header["VACUUM"] = is_vacuum
        primary.header["ORIGFILE"] = source
        if teff_k:
            primary.header["MODTEFF"] = (teff_k, "K, of the model as its name says")
            primary.header["MODLOGG"] = (log_g, "of the model as its name says")
        if named:
            primary.header["MODNAME"] = named[0].split(".")[0]
        buffer = io.BytesIO()
        fits.HDUList([primary, table]).writeto(buffer)
        with open(folder / f"{name}.fits.gz", "wb") as file:
            with gzip.GzipFile(filename="", fileobj=file, mode="wb", mtime=0) as packed:
                packed.write(buffer.getvalue())
        print(f"{name:14} {len(wave):6} rows, {wave[0]:.2f} - {wave[-1]:.2f} A", primary.header.get("MODNAME", ""))


main()
