"""What the cell does: its function proved by simulation, its rest found, a first sheet from a bare netlist.

Public: :func:`charflow.probe.prepare.prepare`, :func:`charflow.probe.draft.draft`.
"""
