"""What to simulate: the zero-delay function, the arcs that follow from it, trials and decks.

Public: :func:`charflow.plan.derive.arcs_of`, :class:`charflow.plan.trial.Trial`,
:class:`charflow.plan.circuit.Circuit`, :func:`charflow.plan.deck.deck`. May import ``sheet`` only.
"""
