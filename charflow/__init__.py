"""charflow measures the timing of register cells with ngspice and writes the tables timing analysis needs.

Read the stages in the order data flows: ``sheet`` (what the user says), ``plan`` (what to simulate),
``simulate`` (how ngspice is run), ``probe`` (what the cell does), ``solve`` (what the answer is),
``campaign`` (many answers), ``tables`` (answers as tables), ``cli``.
"""

__version__ = "0.1.0"
