"""How ngspice is run: in this process, or as an executable; and what a sampled waveform shows.

Public: :class:`charflow.simulate.engine.Engine`, :func:`charflow.simulate.batch.run_batch`. The rest of
charflow sees the simulator only as a function from trial to outcome.
"""
