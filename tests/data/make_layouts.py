"""Writes tests/data/layouts: one small file per layout, and what astropy reads from it.

    python tests/data/make_layouts.py

Needs numpy and astropy. Every file holds an invented star. Files are written by astropy, read back by
astropy, and turned into wavelength (A, in the file's medium), flux, sigma, is_good and FWHM (A) by
each layout's rule, written here a second time, independently of the program. Equal versions give
equal bytes.
"""

import gzip
import io
import json
import pathlib

import numpy as np
from astropy.io import fits

FOLDER = pathlib.Path(__file__).parent / "layouts"
PIXELS = 120
RANDOM = np.random.default_rng(20261201)
FWHM_PER_SIGMA = 2.0 * np.sqrt(2.0 * np.log(2.0))
expected = {}


def flux_like(pixels=PIXELS, scale=1.0):
    return (scale * (1.0 + 0.1 * RANDOM.standard_normal(pixels))).astype("f4")


def write(name, hdus, patch=lambda content: content):
    buffer = io.BytesIO()
    fits.HDUList(hdus).writeto(buffer)
    with open(FOLDER / f"{name}.fits.gz", "wb") as file:
        with gzip.GzipFile(filename="", fileobj=file, mode="wb", mtime=0) as packed:
            packed.write(patch(buffer.getvalue()))
    return fits.open(FOLDER / f"{name}.fits.gz")


def expect(name, layout, row, star, wave, flux, sigma, is_good, fwhm, medium="vacuum"):
    is_usable = is_good & np.isfinite(flux) & np.isfinite(sigma) & (sigma > 0)
    expected.setdefault(name, []).append({
        "layout": layout, "row": row, "name": star, "medium": medium,
        "wave_aa": [float(x) for x in wave],
        "flux": [float(x) if ok else None for x, ok in zip(flux, is_usable)],
        "sigma": [float(x) if ok else None for x, ok in zip(sigma, is_usable)],
        "fwhm_aa": [float(x) for x in np.broadcast_to(fwhm, wave.shape)] if fwhm is not None else None,
    })


def ivar_sigma(ivar):
    with np.errstate(divide="ignore"):
        return np.where(ivar > 0, 1.0 / np.sqrt(ivar.astype("f8")), np.nan)


def sdss_spec():
    ivar = np.full(PIXELS, 400.0, "f4")
    ivar[3] = 0
    mask = np.zeros(PIXELS, "i4")
    mask[10] = 1 << 23
    columns = [
        fits.Column("flux", "E", array=flux_like()),
        fits.Column("loglam", "E", array=(3.6 + 1e-4 * np.arange(PIXELS)).astype("f4")),
        fits.Column("ivar", "E", array=ivar),
        fits.Column("and_mask", "J", array=mask),
        fits.Column("or_mask", "J", array=np.full(PIXELS, 1 << 23, "i4")),
        fits.Column("wdisp", "E", array=np.linspace(0.8, 1.2, PIXELS).astype("f4")),
    ]
    primary = fits.PrimaryHDU()
    for key, value in [("TELESCOP", "SDSS 2.5-M"), ("PLATEID", 9001), ("FIBERID", 77), ("RA", 10.0), ("DEC", 2.0),
                       ("PLUG_RA", 11.5), ("PLUG_DEC", 1.25), ("VACUUM", True), ("BUNIT", "1E-17 erg/cm^2/s/Ang")]:
        primary.header[key] = value
    catalogue = fits.BinTableHDU.from_columns([
        fits.Column("PLATE", "J", array=[9001]), fits.Column("MJD", "J", array=[60001]),
        fits.Column("FIBERID", "J", array=[77]), fits.Column("CLASS", "6A", array=["STAR"]),
    ], name="SPALL")
    hdus = write("sdss_spec", [primary, fits.BinTableHDU.from_columns(columns, name="COADD"), catalogue])
    t = hdus["COADD"].data
    wave = 10.0 ** t["loglam"].astype("f8")
    fwhm = FWHM_PER_SIGMA * t["wdisp"].astype("f8") * 1e-4 * np.log(10.0) * wave
    expect("sdss_spec", "sdss-spec", None, "SDSS 9001-60001-77", wave, t["flux"] * 1e-17,
           ivar_sigma(t["ivar"]) * 1e-17, t["and_mask"] == 0, fwhm)


def sdss_spspec():
    image = np.zeros((5, PIXELS), "f4")
    image[0] = flux_like(scale=20.0)
    image[2] = 0.5
    image[2, 7] = 0.0
    image[3, 50:60] = float(1 << 30)
    primary = fits.PrimaryHDU(image)
    for key, value in [("TELESCOP", "SDSS 2.5-M"), ("PLATEID", 300), ("MJD", 51900), ("FIBERID", 5), ("RA", 5.0),
                       ("DEC", 0.0), ("RAOBJ", 5.5), ("DECOBJ", -0.5), ("COEFF0", 3.6), ("COEFF1", 1e-4),
                       ("VACUUM", True), ("BUNIT", "1.0E-17 erg/cm/s/Ang"), ("ARRAY1", "SPECTRUM")]:
        primary.header[key] = value
    lines = fits.BinTableHDU.from_columns([
        fits.Column("wave", "E", array=[4862.0, 6564.0]), fits.Column("restWave", "E", array=[4862.7, 6564.6]),
        fits.Column("sigma", "E", array=[3.0, 3.0]), fits.Column("lineMask", "1A", array=["a", "b"]),
    ])
    mask = np.zeros(PIXELS, "i4")
    mask[20] = 4
    extra = fits.BinTableHDU.from_columns([
        fits.Column("andMask", "J", array=mask), fits.Column("orMask", "J", array=mask),
        fits.Column("dispersion", "E", array=np.full(PIXELS, 1.1, "f4")),
    ])
    hdus = write("sdss_spspec", [primary, lines, extra])
    d, t = hdus[0].data, hdus[2].data
    wave = 10.0 ** (3.6 + 1e-4 * np.arange(PIXELS))
    fwhm = FWHM_PER_SIGMA * t["dispersion"].astype("f8") * 1e-4 * np.log(10.0) * wave
    expect("sdss_spspec", "sdss-spspec", None, "SDSS 300-51900-5", wave, d[0] * 1e-17, d[2] * 1e-17,
           t["andMask"] == 0, fwhm)


def lamost():
    image = np.zeros((5, PIXELS), "f4")
    image[0] = flux_like(scale=5000.0)
    image[1] = 1e-4
    image[1, :4] = 0
    image[2] = 1.0
    image[3, 30] = 2
    primary = fits.PrimaryHDU(image)
    for key, value in [("TELESCOP", "LAMOST"), ("EXTEN0", "Flux Inverse Subcontinuum Andmask Ormask"),
                       ("DESIG", "KF J0000+00"), ("OBJNAME", "12345"), ("COEFF0", 3.5682), ("COEFF1", 1e-4),
                       ("VACUUM", True), ("HELIO", True)]:
        primary.header[key] = value
    d = write("lamost_image", [primary])[0].data
    wave = 10.0 ** (3.5682 + 1e-4 * np.arange(PIXELS))
    expect("lamost_image", "lamost", None, "KF J0000+00", wave, d[0], ivar_sigma(d[1]), d[3] == 0, wave / 1800.0)

    primary = fits.PrimaryHDU()
    for key, value in [("TELESCOP", "LAMOST"), ("DESIG", "KF J0001+00"), ("HELIO", True)]:
        primary.header[key] = value
    mask = np.zeros((1, PIXELS), "i4")
    mask[0, 5] = 1
    columns = [
        fits.Column("FLUX", f"{PIXELS}E", array=flux_like()[None]),
        fits.Column("IVAR", f"{PIXELS}E", array=np.full((1, PIXELS), 900.0, "f4")),
        fits.Column("WAVELENGTH", f"{PIXELS}E", array=wave.astype("f4")[None]),
        fits.Column("ANDMASK", f"{PIXELS}J", array=mask),
    ]
    t = write("lamost_table", [primary, fits.BinTableHDU.from_columns(columns, name="COADD")])[1].data
    wave = t["WAVELENGTH"][0].astype("f8")
    expect("lamost_table", "lamost", None, "KF J0001+00", wave, t["FLUX"][0], ivar_sigma(t["IVAR"][0]),
           t["ANDMASK"][0] == 0, wave / 1800.0)


def desi():
    ids = [39600000000000001, -5, 39600000000000003]
    kinds = ["TGT", "TGT", "TGT"]
    map_ = fits.BinTableHDU.from_columns([
        fits.Column("TARGETID", "K", array=ids), fits.Column("COADD_FIBERSTATUS", "J", array=[0, 0, 8]),
        fits.Column("OBJTYPE", "3A", array=kinds), fits.Column("TARGET_RA", "D", array=[1.0, 2.0, 3.0]),
        fits.Column("TARGET_DEC", "D", array=[-1.0, -2.0, -3.0]), fits.Column("COADD_EXPTIME", "E", array=[900.0] * 3),
    ], name="FIBERMAP")
    hdus = [fits.PrimaryHDU(), map_]
    arms = {"B": 4000.0 + 0.8 * np.arange(60), "R": 4040.0 + 0.8 * np.arange(60)}
    for arm, wave in arms.items():
        wave_hdu = fits.ImageHDU(wave, name=f"{arm}_WAVELENGTH")
        wave_hdu.header["BUNIT"] = "Angstrom"
        flux_hdu = fits.ImageHDU(np.stack([flux_like(60) for _ in ids]), name=f"{arm}_FLUX")
        flux_hdu.header["BUNIT"] = "10**-17 erg/(s cm2 Angstrom)"
        ivar = np.full((3, 60), 25.0, "f4")
        ivar[0, 2] = 0
        mask = np.zeros((3, 60), "u4")
        mask[2, 4] = 1 << 31
        offsets = np.arange(11) - 5.0
        response = np.exp(-0.5 * (offsets[None, :, None] / 0.9) ** 2) * np.ones((3, 1, 60))
        hdus += [wave_hdu, flux_hdu, fits.ImageHDU(ivar, name=f"{arm}_IVAR"), fits.ImageHDU(mask, name=f"{arm}_MASK"),
                 fits.ImageHDU(response.astype("f4"), name=f"{arm}_RESOLUTION")]
    hdus = write("desi_coadd", hdus)
    # Overlap 4 040 - 4 047.2 A, seam in the middle.
    seam = 0.5 * (arms["B"][-1] + arms["R"][0])
    keep = {"B": arms["B"] <= seam, "R": arms["R"] > seam}
    for row in (0, 2):
        parts = {key: [] for key in ("wave", "flux", "sigma", "good", "fwhm")}
        for arm in "BR":
            k = keep[arm]
            r = hdus[f"{arm}_RESOLUTION"].data[row].astype("f8")
            norm, offset = r.sum(axis=0), np.arange(11.0)[:, None]
            mean = (r * offset).sum(axis=0) / norm
            sigma_pixels = np.sqrt((r * offset**2).sum(axis=0) / norm - mean**2)
            parts["wave"].append(hdus[f"{arm}_WAVELENGTH"].data[k])
            parts["flux"].append(hdus[f"{arm}_FLUX"].data[row][k] * 1e-17)
            parts["sigma"].append(ivar_sigma(hdus[f"{arm}_IVAR"].data[row][k]) * 1e-17)
            parts["good"].append(hdus[f"{arm}_MASK"].data[row][k] == 0)
            parts["fwhm"].append((FWHM_PER_SIGMA * sigma_pixels * 0.8)[k])
        joined = {key: np.concatenate(value) for key, value in parts.items()}
        expect("desi_coadd", "desi", row, f"DESI {ids[row]}", joined["wave"], joined["flux"], joined["sigma"],
               joined["good"], joined["fwhm"])


def eso_sdp():
    wave = np.linspace(380.0, 520.0, PIXELS)
    quality = np.zeros((1, PIXELS), "i4")
    quality[0, 8] = 1
    columns = [
        fits.Column("WAVE", f"{PIXELS}D", "nm", array=wave[None]),
        fits.Column("FLUX_TELL_CORR", f"{PIXELS}E", "erg s**(-1) cm**(-2) nm**(-1)", array=np.full((1, PIXELS), 9.0, "f4")),
        fits.Column("FLUX", f"{PIXELS}E", "erg s**(-1) cm**(-2) nm**(-1)", array=flux_like()[None] * 1e-15),
        fits.Column("ERR_FLUX", f"{PIXELS}E", "erg s**(-1) cm**(-2) nm**(-1)", array=np.full((1, PIXELS), 1e-17, "f4")),
        fits.Column("QUAL", f"{PIXELS}J", array=quality),
    ]
    table = fits.BinTableHDU.from_columns(columns, name="SPECTRUM")
    for key, value in [("VOCLASS", "SPECTRUM V2.0"), ("TUTYP1", "spec:Data.SpectralAxis.Value"),
                       ("TUCD1", "em.wl;obs.atmos"), ("TUTYP2", "eso:Data.FluxAxis.Value"),
                       ("TUTYP3", "spec:Data.FluxAxis.Value"), ("TUTYP4", "spec:Data.FluxAxis,Accuracy,StatError"),
                       ("TUTYP5", "spec:Data.FluxAxis.Accuracy.QualityStatus"), ("NELEM", PIXELS)]:
        table.header[key] = value
    primary = fits.PrimaryHDU()
    for key, value in [("PRODCATG", "SCIENCE.SPECTRUM"), ("OBJECT", "KF J0002+00"), ("SPEC_RES", 5300.0),
                       ("SPECSYS", "BARYCENT"), ("FLUXCAL", "ABSOLUTE")]:
        primary.header[key] = value
    t = write("eso_sdp", [primary, table])[1].data
    wave = t["WAVE"][0] * 10.0
    expect("eso_sdp", "eso-sdp", None, "KF J0002+00", wave, t["FLUX"][0].astype("f8") * 0.1,
           t["ERR_FLUX"][0].astype("f8") * 0.1, t["QUAL"][0] == 0, None, "air")


def hst_x1d():
    # One order as of a first-order grating; the cell is longer than the spectrum in it.
    used = PIXELS - 10
    wave = np.zeros(PIXELS)
    wave[:used] = 4000.0 + 2.7 * np.arange(used)
    quality = np.zeros((1, PIXELS), "i2")
    quality[0, 6] = 512
    quality[0, 7] = 1024
    columns = [
        fits.Column("SPORDER", "I", array=[1]), fits.Column("NELEM", "I", array=[used]),
        fits.Column("WAVELENGTH", f"{PIXELS}D", "Angstroms", array=wave[None]),
        fits.Column("FLUX", f"{PIXELS}E", "erg/s/cm**2/Angstrom", array=flux_like()[None] * 1e-14),
        fits.Column("ERROR", f"{PIXELS}E", "erg/s/cm**2/Angstrom", array=np.full((1, PIXELS), 2e-16, "f4")),
        fits.Column("DQ", f"{PIXELS}I", array=quality),
    ]
    primary = fits.PrimaryHDU()
    for key, value in [("TELESCOP", "HST"), ("INSTRUME", "STIS"), ("TARGNAME", "KF-J0003"), ("HELCORR", "COMPLETE")]:
        primary.header[key] = value
    table = fits.BinTableHDU.from_columns(columns, name="SCI")
    table.header["SDQFLAGS"] = 31743  # all bits but 1024
    t = write("hst_x1d", [primary, table])[1].data
    expect("hst_x1d", "hst-x1d", None, "KF-J0003", t["WAVELENGTH"][0][:used], t["FLUX"][0][:used],
           t["ERROR"][0][:used], (t["DQ"][0][:used] & 31743) == 0, None)


def iraf_multispec():
    from numpy.polynomial import chebyshev, legendre

    pixels = np.arange(1.0, PIXELS + 1.0)
    n = (pixels - (PIXELS + 1) / 2) / ((PIXELS - 1) / 2)
    cheb, leg = [4300.0, 200.0, -3.0, 0.4], [4800.0, 150.0, 2.0]
    coeff = "{0} 1 {1} ".format
    specs = [
        (f"1 1 0 4000.5 2.5 {PIXELS} 0. 0. 0.", 4000.5 + 2.5 * (pixels - 1)),
        (f"2 2 1 3.6 0.0005 {PIXELS} 0. 0. 0.", 10 ** (3.6 + 0.0005 * (pixels - 1))),
        (f"3 3 2 4000. 1. {PIXELS} 0.001 0. 0. 1. 0. 1 4 1 {PIXELS} " + " ".join(map(repr, cheb)),
         chebyshev.chebval(n, cheb) / 1.001),
        # Two functions, each with a weight and a zero point.
        (f"4 4 2 4000. 1. {PIXELS} 0. 0. 0. 0.5 10. 2 3 1 {PIXELS} " + " ".join(map(repr, leg))
         + f" 0.5 0. 1 4 1 {PIXELS} " + " ".join(map(repr, cheb)),
         0.5 * (10.0 + legendre.legval(n, leg)) + 0.5 * chebyshev.chebval(n, cheb)),
        (f"5 5 2 4000. 1. {PIXELS} 0. 0. 0. 1. 0. 4 2 1 {PIXELS} 4000. 4300. 4900.",
         np.interp(pixels, [1.0, (PIXELS + 1) / 2, PIXELS], [4000.0, 4300.0, 4900.0])),
        # A cubic B-spline with equal coefficient steps is a straight line: sum of c_j B_j with c_j = a + b j.
        (f"6 6 2 4000. 1. {PIXELS} 0. 0. 0. 1. 0. 3 2 1 {PIXELS} 600. 700. 800. 900. 1000.",
         6.0 * (600.0 + 100.0 * (1.0 + (pixels - 1) / (PIXELS - 1) * 2.0))),
    ]
    text = "wtype=multispec " + " ".join(f'spec{i + 1} = "{spec}"' for i, (spec, _) in enumerate(specs))
    data = np.stack([flux_like(scale=1000.0) for _ in specs])
    bands = np.stack([data, np.full_like(data, 7.0), np.full_like(data, 6.0), np.full_like(data, 20.0)])
    primary = fits.PrimaryHDU(bands)
    for key, value in [("CTYPE1", "MULTISPE"), ("CTYPE2", "MULTISPE"), ("CTYPE3", "LINEAR"), ("CDELT1", 1.0), ("CD1_1", 1.0),
                       ("OBJECT", "KF J0004"), ("WAT0_001", "system=multispec"),
                       ("WAT1_001", "wtype=multispec label=Wavelength units=angstroms"),
                       ("BANDID1", "spectrum - background fit, weights variance, clean yes"),
                       ("BANDID2", "raw"), ("BANDID3", "background"), ("BANDID4", "sigma - background fit")]:
        primary.header[key] = value
    for number, start in enumerate(range(0, len(text), 68)):
        primary.header[f"WAT2_{number + 1:03d}"] = text[start:start + 68]
    d = write("iraf_multispec", [primary])[0].data
    for row, (_, wave) in enumerate(specs):
        expect("iraf_multispec", "iraf-multispec", row, "KF J0004", wave, d[0, row], d[3, row],
               np.ones(PIXELS, bool), None)


def image():
    data = (flux_like(scale=1000.0)).astype("i2")
    primary = fits.PrimaryHDU(data)
    primary.header["BSCALE"] = 0.01
    primary.header["BZERO"] = 5.0
    for key, value in [("CTYPE1", "AWAV"), ("CUNIT1", "nm"), ("CRVAL1", 450.0), ("CRPIX1", 60.0), ("CDELT1", 0.5),
                       ("OBJECT", "KF J0005"), ("SPECSYS", "TOPOCENT"), ("BUNIT", "1e-20 erg / (Angstrom cm2 s)")]:
        primary.header[key] = value
    variance = fits.ImageHDU(np.full(PIXELS, 0.25), name="STAT")
    quality = np.zeros(PIXELS, "i2")
    quality[40] = 3
    hdus = write("image_air", [primary, variance, fits.ImageHDU(quality, name="DQ")])
    wave = (450.0 + 0.5 * (np.arange(PIXELS) + 1 - 60.0)) * 10.0
    expect("image_air", "image", None, "KF J0005", wave, hdus[0].data.astype("f8") * 1e-20,
           np.sqrt(hdus["STAT"].data) * 1e-20, hdus["DQ"].data == 0, None, "air")


def table():
    raw = (20000 + 100 * RANDOM.standard_normal(PIXELS)).astype("i2")
    raw[4] = -32768
    good = np.ones(PIXELS, bool)
    good[9] = False
    columns = [
        fits.Column("wave_vac", "D", "um", array=np.linspace(0.38, 0.52, PIXELS)),
        fits.Column("flux", "I", "Wm-2um-1", array=raw),
        fits.Column("variance", "D", array=np.full(PIXELS, 1e-34)),
        fits.Column("good", "L", array=good),
    ]
    hdu = fits.BinTableHDU.from_columns(columns)
    # Scale and null value are put in behind astropy's back, which would otherwise rescale on writing.
    for key, value in [("XSCAL2", 1e-19), ("XZERO2", 1e-15), ("XNULL2", -32768)]:
        hdu.header[key] = value
    primary = fits.PrimaryHDU()
    primary.header["OBJECT"] = "KF J0006"
    patch = lambda content: content.replace(b"XSCAL2 ", b"TSCAL2 ").replace(b"XZERO2 ", b"TZERO2 ").replace(b"XNULL2 ", b"TNULL2 ")
    t = write("table_scaled", [primary, hdu], patch)[1].data
    flux = np.array(t["flux"], "f8")
    flux[raw == -32768] = np.nan
    expect("table_scaled", "table", None, "KF J0006", t["wave_vac"] * 1e4, flux * 0.1, np.sqrt(t["variance"]) * 0.1,
           t["good"], None)


def pypeit():
    mask = np.ones(PIXELS, "i4")
    mask[5] = 0
    columns = [
        fits.Column("wave", "D", array=4000.0 + 1.5 * np.arange(PIXELS)),
        fits.Column("wave_grid_mid", "D", array=4000.0 + 1.5 * np.arange(PIXELS)),
        fits.Column("flux", "D", array=flux_like().astype("f8")),
        fits.Column("ivar", "D", array=np.full(PIXELS, 100.0)),
        fits.Column("mask", "J", array=mask),
    ]
    table = fits.BinTableHDU.from_columns(columns, name="SPECTRUM")
    for key, value in [("DMODCLS", "OneSpec"), ("EXT_MODE", "OPT"), ("FLUXED", True)]:
        table.header[key] = value
    primary = fits.PrimaryHDU()
    primary.header["TARGET"] = "KF J0007"
    t = write("pypeit_coadd", [primary, table])[1].data
    expect("pypeit_coadd", "pypeit", None, "KF J0007", t["wave"], t["flux"] * 1e-17, ivar_sigma(t["ivar"]) * 1e-17,
           t["mask"] == 1, None)

    objects = []
    for number in range(2):
        columns = [
            fits.Column("OPT_WAVE", "D", array=4000.0 + 2.0 * np.arange(PIXELS)),
            fits.Column("OPT_COUNTS", "D", array=flux_like(scale=800.0).astype("f8")),
            fits.Column("OPT_COUNTS_IVAR", "D", array=np.full(PIXELS, 0.01)),
            fits.Column("OPT_MASK", "L", array=mask == 1),
            fits.Column("OPT_FWHM", "D", array=np.full(PIXELS, 4.5)),
        ]
        table = fits.BinTableHDU.from_columns(columns, name=f"SPAT{number:04d}-SLIT0001-DET01")
        table.header["DMODCLS"] = "SpecObj"
        objects.append(table)
    hdus = write("pypeit_spec1d", [primary, *objects])
    for number in range(2):
        t = hdus[number + 1].data
        expect("pypeit_spec1d", "pypeit", number, "KF J0007", t["OPT_WAVE"], t["OPT_COUNTS"],
               ivar_sigma(t["OPT_COUNTS_IVAR"]), t["OPT_MASK"], t["OPT_FWHM"])


def image_set():
    primary = fits.PrimaryHDU(flux_like().astype("f8"))
    primary.header["EXTNAME"] = "FLUX"
    primary.header["OBJECT"] = "KF J0008"
    primary.header["VACUUM"] = True
    error = fits.ImageHDU(np.full(PIXELS, 0.1), name="ERROR")
    wave = fits.ImageHDU(4000.0 + np.cumsum(np.full(PIXELS, 1.25)), name="WAVELENGTH")
    hdus = write("image_set", [primary, error, wave])
    expect("image_set", "image-set", None, "KF J0008", hdus[2].data, hdus[0].data, hdus[1].data,
           np.ones(PIXELS, bool), None)


def sdss_spplate():
    fibres = 6
    ivar = np.full((fibres, PIXELS), 16.0, "f4")
    ivar[1, :3] = 0
    mask = np.zeros((fibres, PIXELS), "i4")
    mask[1, 9] = 4
    primary = fits.PrimaryHDU(np.stack([flux_like(scale=9.0) for _ in range(fibres)]))
    for key, value in [("TELESCOP", "SDSS 2.5-M"), ("PLATEID", 777), ("MJD", 52000), ("COEFF0", 3.6), ("COEFF1", 1e-4),
                       ("BUNIT", "1E-17 erg/cm^2/s/Ang")]:
        primary.header[key] = value
    plugs = fits.BinTableHDU.from_columns([
        fits.Column("OBJTYPE", "16A", array=["SKY"] + ["GALAXY"] * (fibres - 1)),
        fits.Column("RA", "D", array=np.linspace(10.0, 11.0, fibres)), fits.Column("DEC", "D", array=np.zeros(fibres)),
        fits.Column("FIBERID", "J", array=np.arange(fibres) + 1),
    ])
    width = np.full((fibres, PIXELS), 0.95, "f4")
    hdus = write("sdss_spplate", [primary, fits.ImageHDU(ivar), fits.ImageHDU(mask), fits.ImageHDU(mask),
                                  fits.ImageHDU(width), plugs])
    wave = 10.0 ** (3.6 + 1e-4 * np.arange(PIXELS))
    for row in range(1, fibres):
        fwhm = FWHM_PER_SIGMA * hdus[4].data[row].astype("f8") * 1e-4 * np.log(10.0) * wave
        expect("sdss_spplate", "sdss-spplate", row, f"SDSS 777-52000-{row + 1}", wave, hdus[0].data[row] * 1e-17,
               ivar_sigma(hdus[1].data[row]) * 1e-17, hdus[2].data[row] == 0, fwhm)


def two_df():
    types = ["P", "S", "P"]
    primary = fits.PrimaryHDU(np.stack([flux_like(scale=300.0) for _ in types]))
    for key, value in [("INSTRUME", "AAOMEGA-2dF"), ("CRVAL1", 4500.0), ("CRPIX1", 60.0), ("CDELT1", 1.03),
                       ("CUNIT1", "Angstroms"), ("CTYPE1", "Wavelength")]:
        primary.header[key] = value
    primary.data[0, 3] = np.nan
    variance = fits.ImageHDU(np.full((3, PIXELS), 9.0, "f4"), name="VARIANCE")
    table = fits.BinTableHDU.from_columns([
        fits.Column("NAME", "20A", array=["KF J0009", "sky", "KF J0010"]), fits.Column("TYPE", "1A", array=types),
        fits.Column("RA", "D", array=[0.1, 0.2, 0.3]), fits.Column("DEC", "D", array=[0.0, 0.1, -0.1]),
    ], name="FIBRES")
    hdus = write("two_df", [primary, variance, table])
    wave = 4500.0 + 1.03 * (np.arange(PIXELS) + 1 - 60.0)
    for row in (0, 2):
        expect("two_df", "two-df", row, hdus["FIBRES"].data["NAME"][row], wave, hdus[0].data[row],
               np.sqrt(hdus["VARIANCE"].data[row]), np.ones(PIXELS, bool), None, "air")


def sdss_mwm():
    # A stack as of mwmStar (optical extension with one row, the others empty) and two visits as of mwmVisit.
    wave = 10.0 ** (3.55 + 1e-4 * np.arange(PIXELS))
    primary = fits.PrimaryHDU()
    for key, value in [("V_ASTRA", "0.6.0"), ("SDSS_ID", 60000001), ("TELESCOP", "SDSS")]:
        primary.header[key] = value

    def table(rows, name, with_wave=True):
        flags = np.zeros((rows, PIXELS), "i8")
        if rows:
            flags[0, 12] = 4
        columns = [
            fits.Column("v_rad", "E", array=[25.0, -40.0][:rows]), fits.Column("mjd", "J", array=[60010, 60020][:rows]),
            fits.Column("flux", f"{PIXELS}E", array=np.stack([flux_like(scale=30.0) for _ in range(rows)])
                        if rows else np.zeros((0, PIXELS), "f4")),
            fits.Column("ivar", f"{PIXELS}E", array=np.full((rows, PIXELS), 4.0, "f4")),
            fits.Column("pixel_flags", f"{PIXELS}K", array=flags),
        ]
        if with_wave:
            columns.append(fits.Column("wavelength", f"{PIXELS}D", array=np.tile(wave, (rows, 1))))
        hdu = fits.BinTableHDU.from_columns(columns, name=name)
        if not with_wave:
            for key, value in [("CRVAL", 3.55), ("CDELT", 1e-4), ("CRPIX", 1), ("CTYPE", "LOG-LINEAR")]:
                hdu.header[key] = value
        return hdu

    for name, rows, with_wave in [("sdss_mwm_star", 1, True), ("sdss_mwm_visit", 2, False)]:
        hdus = write(name, [primary, table(rows, "BOSS/APO", with_wave), table(0, "BOSS/LCO", with_wave),
                            table(1, "APOGEE/APO", with_wave)])
        t = hdus[1].data
        for row in range(rows):
            shifted = wave * (1.0 + t["v_rad"][row].astype("f8") / 299792.458)
            expect(name, "sdss-mwm", row, "SDSS 60000001", shifted, t["flux"][row] * 1e-17,
                   ivar_sigma(t["ivar"][row]) * 1e-17, t["pixel_flags"][row] == 0, None)


def weave():
    fibres = 3
    data = fits.ImageHDU(np.stack([flux_like(scale=500.0) for _ in range(fibres)]), name="BLUE_DATA")
    for key, value in [("CRVAL1", 4000.0), ("CD1_1", 0.5), ("CRPIX1", 1.0), ("CTYPE1", "AWAV"), ("CUNIT1", "Angstrom")]:
        data.header[key] = value
    ivar = np.full((fibres, PIXELS), 0.01, "f4")
    ivar[0, 3] = 0
    sensitivity = (np.linspace(1.0, 2.0, PIXELS) * 1e-18)[None, :] * np.ones((fibres, 1))
    table = fits.BinTableHDU.from_columns([
        fits.Column("FIBREID", "J", array=[11, 12, 13]), fits.Column("TARGUSE", "1A", array=["T", "S", "T"]),
        fits.Column("CNAME", "20A", array=["KF J0011", "", "KF J0012"]), fits.Column("TARGID", "12A", array=["a1", "", "a3"]),
        fits.Column("FIBRERA", "D", array=[1.0, 2.0, 3.0]), fits.Column("FIBREDEC", "D", array=[4.0, 5.0, 6.0]),
    ], name="FIBTABLE")
    primary = fits.PrimaryHDU()
    for key, value in [("OBID", 3456), ("MJD-OBS", 60300.25), ("TELESCOP", "WHT"), ("INSTRUME", "WEAVE")]:
        primary.header[key] = value
    hdus = write("weave", [primary, data, fits.ImageHDU(ivar, name="BLUE_IVAR"),
                           fits.ImageHDU(sensitivity, name="BLUE_SENSFUNC"), table])
    wave = 4000.0 + 0.5 * np.arange(PIXELS)
    for row in (0, 2):
        factor = hdus["BLUE_SENSFUNC"].data[row]
        expect("weave", "weave", row, hdus["FIBTABLE"].data["CNAME"][row], wave, hdus["BLUE_DATA"].data[row] * factor,
               ivar_sigma(hdus["BLUE_IVAR"].data[row]) * factor, np.ones(PIXELS, bool), None, "air")


def lamost_medium():
    arms = {"COADD_B": np.linspace(4950.0, 5350.0, PIXELS), "COADD_R": np.linspace(6300.0, 6800.0, PIXELS)}
    primary = fits.PrimaryHDU()
    for key, value in [("TELESCOP", "LAMOST"), ("DESIG", "KF J0013+00"), ("HELIO", True)]:
        primary.header[key] = value
    hdus = [primary]
    for name, wave in arms.items():
        mask = np.zeros((1, PIXELS), "i4")
        mask[0, 2] = 1
        hdus.append(fits.BinTableHDU.from_columns([
            fits.Column("FLUX", f"{PIXELS}E", array=flux_like()[None]),
            fits.Column("IVAR", f"{PIXELS}E", array=np.full((1, PIXELS), 2500.0, "f4")),
            fits.Column("WAVELENGTH", f"{PIXELS}D", array=wave[None]),
            fits.Column("ANDMASK", f"{PIXELS}J", array=mask),
        ], name=name))
    hdus = write("lamost_medium", hdus)
    tables = [hdus[name].data for name in arms]
    joined = lambda column: np.concatenate([t[column][0] for t in tables])
    wave = joined("WAVELENGTH")
    expect("lamost_medium", "lamost", None, "KF J0013+00", wave, joined("FLUX"), ivar_sigma(joined("IVAR")),
           joined("ANDMASK") == 0, wave / 7500.0)


def row_stack():
    wave = np.linspace(0.38, 0.52, PIXELS)
    primary = fits.PrimaryHDU(np.stack([wave, flux_like().astype("f8") * 1e-13, np.full(PIXELS, 1e-15)]))
    # A celestial axis left over from the frame, as seen on real files.
    for key, value in [("OBJECT", "KF J0014"), ("XUNITS", "um"), ("YUNITS", "Wm-2um-1"), ("AIRORVAC", "vac"),
                       ("CTYPE1", "RA---TAN"), ("CRVAL1", 12.0), ("CDELT1", -1e-4)]:
        primary.header[key] = value
    d = write("row_stack", [primary])[0].data
    expect("row_stack", "row-stack", None, "KF J0014", d[0] * 1e4, d[1] * 0.1, d[2] * 0.1, np.ones(PIXELS, bool), None)


def text():
    from astropy.table import Table

    wave = 4000.0 + 1.25 * np.arange(PIXELS)
    table = Table({"wave_vac": wave / 10.0, "flux": flux_like().astype("f8"), "sigma": np.full(PIXELS, 0.02)})
    table["wave_vac"].unit, table["flux"].unit = "nm", "adu"
    table["flux"][5] = np.nan
    table.meta.update({"OBJECT": "KF J0015", "AIRMASS": 1.2})
    # With commas as with blanks: two files of the same values.
    for name, delimiter in [("text_blanks", " "), ("text_commas", ",")]:
        buffer = io.StringIO()
        table.write(buffer, format="ascii.ecsv", delimiter=delimiter)
        with open(FOLDER / f"{name}.ecsv.gz", "wb") as file:
            with gzip.GzipFile(filename="", fileobj=file, mode="wb", mtime=0) as packed:
                packed.write(buffer.getvalue().encode())
        t = Table.read(buffer.getvalue(), format="ascii.ecsv")
        expect(name, "text", None, "KF J0015", t["wave_vac"] * 10.0, np.array(t["flux"]), np.array(t["sigma"]),
               np.ones(PIXELS, bool), None)


def votable():
    from astropy.io.votable import from_table, parse_single_table, tree
    from astropy.table import Table

    # Columns of one name that says nothing and two that do: the first is found by its ucd.
    table = Table({"x1": 4000.0 + 1.25 * np.arange(PIXELS), "flux": flux_like().astype("f8"), "ivar": np.full(PIXELS, 2500.0)})
    table["x1"].unit, table["x1"].info.meta = "Angstrom", {"ucd": "em.wl"}
    table["ivar"][9] = 0.0
    document = from_table(table)
    document.resources[0].infos.append(tree.Info(name="OBJECT", value="KF J0016"))
    document.resources[0].infos.append(tree.Info(name="VACUUM", value="T"))
    buffer = io.BytesIO()
    document.to_xml(buffer)
    with open(FOLDER / "votable.xml.gz", "wb") as file:
        with gzip.GzipFile(filename="", fileobj=file, mode="wb", mtime=0) as packed:
            packed.write(buffer.getvalue())
    t = parse_single_table(io.BytesIO(buffer.getvalue())).to_table()
    expect("votable", "votable", None, "KF J0016", np.array(t["x1"]), np.array(t["flux"]), ivar_sigma(np.array(t["ivar"])),
           np.ones(PIXELS, bool), None)


FOLDER.mkdir(exist_ok=True)
for make in (sdss_spec, sdss_spspec, lamost, desi, eso_sdp, hst_x1d, iraf_multispec, image, table, pypeit, image_set, sdss_spplate, two_df,
             sdss_mwm, weave, lamost_medium, row_stack, text, votable):
    make()
with open(FOLDER / "expected.json", "w") as file:
    json.dump(expected, file, indent=None, separators=(",", ":"), allow_nan=False)
    file.write("\n")
print({name: len(stars) for name, stars in expected.items()})
