"""The whole job, gone through once with a simulated rig: what a newcomer runs first and what must never break."""
