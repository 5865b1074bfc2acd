"""Compares every export of a folder with its CSV, and the CSV with the catalogue."""
import csv
import io
import json
import math
import sqlite3
import subprocess
import sys
import warnings

folder, catalog, testdata = sys.argv[1:]
sys.path.insert(0, testdata)
import astropy.io.votable
from astropy import units
from astropy.io import fits
from astropy.io.votable import ucd
from astropy.table import Table
from gavo import votable as gavo
import parquet

warnings.simplefilter('error')
warnings.simplefilter('ignore', ResourceWarning)
db = sqlite3.connect('file:' + catalog + '?mode=ro', uri=True)
assert db.execute('pragma integrity_check').fetchall() == [('ok',)]
result = {}
schema = astropy.__path__[0] + '/io/votable/data/VOTable.v1.4.xsd'

# Content descriptors are of the controlled vocabulary, those of other tables too.
for column, words in json.load(open(folder + '/descriptors.json')).items():
    assert ucd.check_ucd(words, check_controlled_vocabulary=True), (column, words)


def same(text, value, kind, where):
    """Is a value that a reader gave the one of the CSV?"""
    if kind == 'text':
        assert (value or '') == text, (where, value, text)
    elif text == '':
        assert value is None or math.isnan(value), (where, value, text)
    else:
        assert not isinstance(value, str) and float(text) == value, (where, value, text)


def plain(value):
    """A cell of astropy's as Python's own."""
    if value is None or getattr(value, 'mask', False) is True or str(type(value)).endswith("MaskedConstant'>"):
        return None
    return value.item() if hasattr(value, 'item') else value


for table in ('candidates', 'objects', 'frames', 'lightcurve'):
    base = folder + '/' + table + '.'
    rows = list(csv.reader(open(base + 'csv', newline='')))
    names, rows = rows[0], rows[1:]
    described = list(csv.DictReader(open(base + 'columns', newline='')))
    assert [d['column'] for d in described] == names
    kinds = [d['type'] for d in described]
    n = result[table] = {'rows': len(rows), 'columns': len(names), 'nulls': sum(t == '' for r in rows for t in r)}

    def compare(reader, cell, shown=lambda t: t):
        n[reader] = 0
        for k, row in enumerate(rows):
            for j, (name, kind, text) in enumerate(zip(names, kinds, row)):
                same(shown(text) if kind == 'text' else text, cell(k, j, name), kind, (reader, table, name, k))
                n[reader] += 1

    for d in described:
        assert d['description'], d
        if d['unit']:
            units.Unit(d['unit'], format='vounit')

    with fits.open(base + 'fits', checksum=True) as f:
        hdu = f[table.upper()]
        assert list(hdu.columns.names) == names and len(hdu.data) == len(rows)
        assert [c.unit or '' for c in hdu.columns] == [d['unit'] for d in described]
        data = {c: hdu.data[c] for c in names}
        compare('fits', lambda k, j, name: plain(data[name][k]), lambda t: ''.join(c if ' ' <= c <= '~' else '?' for c in t))

    subprocess.run(['xmllint', '--noout', '--nonet', '--schema', schema, base + 'votable'], check=True, capture_output=True)
    file = astropy.io.votable.parse(base + 'votable', verify='exception')
    vo = file.get_first_table()
    assert vo.nrows == len(rows) and len(vo.array) == len(rows)
    for d, field in zip(described, vo.fields):
        assert (field.name, field.ucd or '', field.description) == (d['column'], d['ucd'], d['description']), (field, d)
        assert units.Unit(field.unit or '') == units.Unit(d['unit']), (field, d)
    cells = {c: vo.array[c] for c in names}
    compare('votable', lambda k, j, name: plain(cells[name][k]))
    second, meta = gavo.load(base + 'votable')
    second = list(second)
    assert len(second) == len(rows)
    fields = meta.getFields()
    assert [f.name for f in fields] == names and [f.unit or '' for f in fields] == [d['unit'] for d in described]
    assert [f.ucd or '' for f in fields] == [d['ucd'] for d in described]
    compare('gavo', lambda k, j, name: second[k][j])

    e = Table.read(base + 'ecsv', format='ascii.ecsv')
    assert e.colnames == names and len(e) == len(rows) and e.meta['name'] == table
    for d in described:
        c = e[d['column']]
        assert units.Unit(c.unit or '') == units.Unit(d['unit']) and c.description == d['description'] and c.meta.get('ucd', '') == d['ucd'], d
    cells = {c: e[c] for c in names}
    compare('ecsv', lambda k, j, name: plain(cells[name][k]), lambda t: t.replace('\n', ' '))

    columns, meta = parquet.read(base + 'parquet')
    assert list(columns) == names
    for d, c in zip(described, json.loads(meta['columns'])):
        assert (c['name'], c['type'], c.get('unit', ''), c.get('ucd', ''), c['description']) == tuple(d[k] for k in ('column', 'type', 'unit', 'ucd', 'description'))
    compare('parquet', lambda k, j, name: columns[name][k])
    bare = astropy.io.votable.parse(io.BytesIO(meta['IVOA.VOTable-Parquet.content'].encode()), verify='exception').get_first_table()
    assert meta['IVOA.VOTable-Parquet.version'] == '1.0' and [f.name for f in bare.fields] == names
    try:
        import pyarrow.parquet
    except ImportError:
        pass
    else:
        arrow = pyarrow.parquet.read_table(base + 'parquet').to_pydict()
        assert list(arrow) == names
        compare('pyarrow', lambda k, j, name: arrow[name][k])

    lines = [json.loads(line) for line in open(base + 'jsonl', encoding='utf-8')]
    assert len(lines) == len(rows) and all(list(line) == names for line in lines)
    compare('jsonl', lambda k, j, name: lines[k][name])

    if table == 'lightcurve':
        continue
    key = {'objects': 'object', 'frames': 'frame', 'candidates': 'candidate_id'}[table]
    assert [r[names.index(key)] for r in rows] == [r[0] for r in db.execute('select %s from view_%s order by %s' % (
        key, table, {'candidates': 'frame, candidate_id'}.get(table, key)))]
    for row in rows:
        stored = db.execute('select ' + ','.join(names) + ' from view_' + table + ' where ' + key + ' = ?', (row[names.index(key)],)).fetchall()
        assert len(stored) == 1, (table, row)
        for name, text, value in zip(names, row, stored[0]):
            if isinstance(value, float):
                assert float(text) == value, (table, name, text, value)
            else:
                assert text == ('' if value is None else str(value)), (table, name, text, value)
print(json.dumps(result))
