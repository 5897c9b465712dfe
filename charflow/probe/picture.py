"""The waveforms of a function check that failed, as a picture beside the error."""

from __future__ import annotations

from pathlib import Path

from charflow.plan.circuit import Circuit
from charflow.probe.function import Flip
from charflow.simulate.waveform import Samples


def draw_mismatch(
    path: Path, circuit: Circuit, flip: Flip, waves: dict[str, Samples], zero: float, message: str
) -> None:
    """Write a picture (format by suffix) of every input and output of ``flip``.

    ``waves`` are volts by node over ``time`` [s], shape (n,); ``zero`` [s] is the flip on that axis.
    """
    import matplotlib

    matplotlib.use("Agg")
    from matplotlib import pyplot

    pins = (*circuit.inputs, *circuit.outputs)
    height = 1.1 + 0.8 * len(pins)
    figure, axes = pyplot.subplots(len(pins), 1, sharex=True, figsize=(7.5, height), squeeze=False)
    after = dict(flip.after)
    end = _interesting(circuit, waves, zero)
    scale, unit = (1e9, "ns") if end > 5e-9 else (1e12, "ps")
    time = (waves["time"] - zero) * scale
    for axis, pin in zip(axes[:, 0], pins, strict=True):
        output = pin in circuit.outputs
        axis.plot(time, waves[circuit.nodes[pin]], color="#1f4e79" if output else "#555555", linewidth=1.6)
        expected = after.get(pin)
        if expected is not None:
            axis.axhline(expected * circuit.supply, color="#b5541c", linestyle=(0, (4, 3)), linewidth=1.2)
            axis.text(
                1.005,
                0.5,
                f"expected {int(expected)}",
                transform=axis.transAxes,
                color="#b5541c",
                va="center",
            )
        axis.set_ylim(-0.15 * circuit.supply, 1.15 * circuit.supply)
        axis.set_ylabel(pin, rotation=0, ha="right", va="center")
        axis.set_yticks([0, circuit.supply])
        axis.spines[["top", "right"]].set_visible(False)
    axes[-1, 0].set_xlim(time[0], end * scale)
    axes[-1, 0].set_xlabel(f"time after the edge [{unit}]; levels in V")
    figure.suptitle(f"{flip.words}\n{message}", x=0.02, ha="left", fontsize=10, parse_math=False)
    figure.tight_layout()
    figure.savefig(path, dpi=110)
    pyplot.close(figure)


def _interesting(circuit: Circuit, waves: dict[str, Samples], zero: float) -> float:
    """Return when [s] after the flip the picture may end: well after the last waveform came to rest."""
    last = 0.0
    for pin in (*circuit.inputs, *circuit.outputs):
        wave = waves[circuit.nodes[pin]]
        moving = abs(wave - wave[-1]) > 0.02 * circuit.supply
        if moving.any():
            last = max(last, float(waves["time"][moving][-1]) - zero)
    return min(max(10 * last, 0.5e-9), float(waves["time"][-1]) - zero)
