"""An invented scenario, small enough to run in seconds, awkward enough to be worth it: see `fellwalk.demo.hives`."""
