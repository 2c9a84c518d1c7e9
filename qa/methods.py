"""Which methods, in which version, this Vialbook measures with: one short line for the ledger."""

from __future__ import annotations

from qa import __version__, fit


def fingerprint() -> str:
    """For example ``vialbook 0.1.0; inversion-recovery 1, spin-echo-train 1``: all that decides a reading's numbers."""
    methods = ", ".join(f"{name} {fit.METHODS[name].version}" for name in sorted(fit.METHODS))
    return f"vialbook {__version__}; {methods}"
