"""What the answer is: the root search, one constrained point, a row of points, the settings they need.

Everything here is written against a function from trial to outcome; :mod:`charflow.solve.fake` is one made
of formulas. Public: :func:`charflow.solve.row.solve_row`, :class:`charflow.solve.answer.Answer`.
"""
