"""From an export to a bank: layouts, one reader a format, checks, and a look at unknown exports.

`ingest` takes files in, `look` describes what is there and drafts a layout. Between them: `sources`
(which files), `layout` and `pattern` (where things lie), the readers (`hdf5`, `npz`, `stacked`,
`groups`, `csv_table`, `parquet_table`, `rows`, `long_rows`, `records`, `matrix_files`), `piece` and
`align` (one shape, one order of names), `unused` (what the default layout does not read), `survey`,
`suspects`, `envelope`, `orientation` and `compose` (the intake report).
"""
