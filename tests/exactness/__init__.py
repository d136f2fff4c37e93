"""Are the chains exact? Independent starts from known laws, a conjugate model, and errors planted in the core.

`build` compiles the core's sources together with the loops in harness.c and conjugate.c, `combinations` lists what the
core offers, `known` the targets with the exact laws of some summaries, `planted` the errors that must be seen.
"""
