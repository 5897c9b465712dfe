"""Many answers: a run over all corners and points, its worker processes, its store, and resuming it.

Public: :func:`charflow.campaign.run.run_campaign`. One process writes the store; workers append to
journals of their own, so a killed worker can lock nothing and loses nothing.
"""
