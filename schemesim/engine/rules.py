"""The rules of a run, and the few constants every engine shares.

A run takes one event, one set of answers and one set of delays and yields one
clearing sequence.

Two house rules explain most of the rest: *what is due at an instant sees its inputs as
they stood at the end of the pass before*, and *a question is asked only when settled
logic cannot go on without its answer*.

- R1 Time is a whole number of microseconds.
- R2 An instant is a sequence of passes. In each: everything due expires; the topology is
  brought up to date; sensing is evaluated; the logic settles; blocks whose input rose
  start, those whose input fell cancel or start their drop-out. Zero-delay consequences
  make a further pass. Gates form no loop; passes are bounded by ``MAX_PASSES``, and what
  goes on beyond them stands still if it can influence nothing.
- R3 A timer that runs out at the very instant its input falls has operated. Nothing
  depends on the order of declaration.
- R4 Signals are true, false or unknown. A gate whose inputs make it true is unknown until
  the failures that bear on it are answered. A question is asked only when a timer, a latch
  or a coil that can still influence an opening (or an observed output) would otherwise
  read an unknown; one at a time, nearest the breaker first, then by role, then by name.
- R5 A failure acts where the block's composition says: it keeps an output from leaving
  (``unless``) or makes it possible (``given``).
- R6 Trip path: contact AND DC AND coil AND mechanism. An energised coil commits the breaker.
- R7 A breaker carries until its interrupting time; one that opens but does not interrupt
  shows 52b and still carries.
- R8 A fault is cleared when no closed path joins it to a source; a device carries fault
  current while it lies on a simple path from a source to the fault.
- R9 After every opening sensing is evaluated anew.
- R10 An inverse-time element travels at a whole speed that depends on the topology only, and
  operates at the first microsecond at which its full travel is reached, so that ∫dt/t(I) = 1
  (:mod:`schemesim.engine.inverse`). Below drop-out it resets at once or goes back by its reset
  curve; between drop-out and pick-up it stands still; a disc first runs on for its overtravel.
- R11 Breaker failure: sealed in until current (or 52a) resets; operates if the timer has
  expired AND current persists; the detector's reset time counts.
- R12 Breaker failure trips every breaker around the failed one, retrip first.
- R13 A lockout latches, adds its own time, blocks closing and is one component for all its contacts.
- R14 DC is a domain: all that hangs on it fails together, channel terminals too.
- R15 Over-reach is asked only where the fault lies in what the element would also see.
- R16 Channels have delay, loss, lateness and false receipt.
- R17 A fault in two protected zones trips both; nothing is arbitrated.
- R18 Trips without a fault are events of their own.
- R19 A random delay is one uniform per seed, trial and block, constant within the run.
- R20 A run ends when nothing is pending, or at the horizon, and says which.
"""

from __future__ import annotations

FALSE, TRUE, UNKNOWN = 0, 1, 2
"""Values of a signal while an instant settles."""

MAX_PASSES = 200
"""Passes of one instant before it is declared not to settle."""
