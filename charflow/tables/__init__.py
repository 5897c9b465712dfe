"""Answers as tables: flat rows (CSV, JSON), labelled grids (xarray), Markdown and the terminal.

Public: :func:`charflow.tables.folder.write_tables`, :func:`charflow.tables.folder.read_tables`,
:func:`charflow.tables.grid.grids_of`.
"""
