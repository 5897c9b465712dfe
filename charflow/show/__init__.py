"""Answers as pictures: figures drawn from rows, never from a simulator.

Every picture begins with :func:`charflow.show.style.figure` and takes its colours from there by role, so that
all look alike, survive a grey print and a reader who does not see red from green. A picture imports
matplotlib when it is drawn, never when its module is.

Public: :mod:`charflow.show.style`, :func:`charflow.show.change.draw_change`.
"""
