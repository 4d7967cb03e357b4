"""Every numerical tolerance of the package, each with its reason."""

from __future__ import annotations

#: Largest dimensionless residual of a solved heat. Rounding leaves 1e-15 to 1e-14; a small
#: difference of large masses, such as undissolved lime, then still has ten digits.
RESIDUAL = 1e-13
#: A heat that stalls above RESIDUAL through rounding still counts as solved below this.
RESIDUAL_STALLED = 1e-10
#: Residual from which one more quasi-Newton step is sure to end below RESIDUAL: the steps gain
#: a factor of 100 there.
POLISHED = 1e-11
#: Promised closure of each element and of energy, relative.
CLOSURE = 1e-9
#: Newton steps before a heat is given up. Ordinary heats need 5 to 8.
MOST_STEPS = 60
#: Newton steps in a chunk before what is left is put aside and solved together.
QUICK_STEPS = 4
#: Rows from which a table is solved from a sample of its own heats, and the least sample.
SAMPLED_FROM = 3000
SAMPLE = 200
#: Rows from which residuals are recorded and replayed: recording costs about as much as
#: working out the residuals of 10,000 heats.
RECORDED_FROM = 2000
#: Rows from which a fit at hand is used at all.
FITTED_FROM = 64
FOLLOWED_STEPS = 11
#: Step from which only the heats that are not solved yet go on.
NARROWED_FROM = 5
#: Halvings of one Newton step before it is taken all the same.
MOST_HALVINGS = 6
#: Heats worked on at once when a recorded formula is replayed, and that go through the solver
#: together: large enough to make a numpy call (about 1 microsecond) small beside its work, small
#: enough for the buffers (about 50) to stay in the last-level cache. Measured from 1024 to
#: 16384: half the time of 1024, flat from here on.
BLOCK = 8192
CHUNK = 16384
#: Width at which the two sides of a complementarity condition meet, dimensionless.
CORNER = 1e-8
#: Time that heats of one kind are solved from which their equations are recorded (recording
#: and writing out cost about two ordinary solves), recordings kept at once (half a
#: megabyte each), and quick steps before a single heat goes the ordinary way.
RECORDED_FROM_HEAT = 3
RECORDINGS_KEPT = 48
MOST_QUICK_STEPS = 30
