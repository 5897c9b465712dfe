"""Tables as Liberty, the open library format of the IEEE-ISTO Liberty Technical Advisory Board.

``syntax`` is the tree of a library and its text, ``expression`` and ``function`` say what a cell does,
``lookup``, ``timing`` and ``power`` turn rows into groups, ``cell`` and ``library`` put them together,
``check`` looks for what readers let pass, ``read`` gives rows from a library of anybody's.

Public: :func:`charflow.tables.liberty.library.library_texts`,
:func:`charflow.tables.liberty.check.liberty_check`,
:func:`charflow.tables.liberty.read.rows_from_liberty`.
"""
