"""Compares exports of a catalogue with the catalogue itself, read by other people's libraries.

python3 check_exports.py CATALOGUE FOLDER: the SQLite file, and the folder with export.{fits,vot,parquet,ecsv,csv}.
Needs astropy and pyarrow. Ends with "all agree" or a list of differences and exit code 1.
"""

import csv
import json
import math
import sqlite3
import sys
import warnings

from astropy.io import fits
from astropy.io.votable import parse_single_table
from astropy.io.votable.ucd import check_ucd
from astropy.table import Table
import pyarrow.parquet

catalogue, folder = sys.argv[1:]
connection = sqlite3.connect(catalogue)
connection.row_factory = sqlite3.Row
rows = [dict(row) for row in connection.execute("select * from results where is_current = 1 order by report")]
kinds = {row["name"]: row["type"] for row in connection.execute("select name, type from pragma_table_info('results')")}
faults = []


def differ(wanted, found, is_lossy):
    if wanted is None or wanted == "":
        return not (found is None or found == "" or (isinstance(found, float) and math.isnan(found)))
    if isinstance(wanted, str) and is_lossy:
        return "".join(c if " " <= c <= "~" else "?" for c in wanted)[:512].rstrip() != found.rstrip()
    return wanted != found


def compare(name, tables, is_lossy=False):
    if len(tables) != len(rows):
        faults.append(f"{name}: {len(tables)} rows, need {len(rows)}")
    for wanted, found in zip(rows, tables):
        for key, value in wanted.items():
            if differ(value, found[key], is_lossy):
                faults.append(f"{name}: {wanted['report'][:40]} {key}: {found[key]!r}, need {value!r}")


def plain(value):
    if value is None or getattr(value, "mask", False) is True or str(value) == "--":
        return None
    return value.item() if hasattr(value, "item") else value


with open(f"{folder}/export.csv", newline="", encoding="utf-8") as file:
    convert = {"TEXT": str, "INTEGER": int, "REAL": float}
    compare("csv", [{key: convert[kinds[key]](value) if value else None for key, value in row.items()}
                    for row in csv.DictReader(file)])

about = {column["name"]: column for column in
         json.loads(pyarrow.parquet.read_metadata(f"{folder}/export.parquet").metadata[b"emberline.columns"])}
compare("parquet", pyarrow.parquet.read_table(f"{folder}/export.parquet").to_pylist())

ecsv = Table.read(f"{folder}/export.ecsv", format="ascii.ecsv")
compare("ecsv", [{key: plain(row[key]) for key in ecsv.colnames} for row in ecsv])

votable = parse_single_table(f"{folder}/export.vot", verify="exception")
compare("votable", [{key: plain(row[key]) for key in votable.to_table().colnames} for row in votable.to_table()])

with warnings.catch_warnings():
    warnings.simplefilter("error")
    with fits.open(f"{folder}/export.fits") as file:
        file.verify("exception")
        header = file[1].header
        table = Table.read(file[1])
compare("fits", [{key: plain(row[key]) for key in table.colnames} for row in table], is_lossy=True)

for number, (key, column) in enumerate(about.items(), start=1):
    check_ucd(column["ucd"], check_controlled_vocabulary=True, has_colon=False)
    field = votable.get_field_by_id(key)
    unit = str(field.unit) if field.unit is not None else ""
    units = {str(ecsv[key].unit or ""), str(table[key].unit or ""), unit}
    if len(units) != 1 or bool(column["unit"]) != bool(unit):
        faults.append(f"{key}: units {units}, need {column['unit']}")
    texts = {column["description"], ecsv[key].description, field.description, header[f"TCOMM{number}"]}
    if len(texts) != 1:
        faults.append(f"{key}: descriptions {texts}")
    if {field.ucd, header[f"TUCD{number}"], ecsv[key].meta["ucd"]} != {column["ucd"]}:
        faults.append(f"{key}: UCDs differ")

print("\n".join(faults) if faults else f"all agree: {len(rows)} rows, {len(about)} columns")
sys.exit(bool(faults))
