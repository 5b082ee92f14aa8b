"""A second opinion on a plan: its own model, power flow and path following.

Nothing here is shared with the code that searched for the plan, except the records that go in and
come out. It is written for clarity: complex admittance matrices, general sparse LU, one Newton
corrector, and a path that stops at every limit event.
"""
