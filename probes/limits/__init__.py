"""How large a time step an explicit scheme tolerates, and why.

schemes and symbols: `integrators`, `stencils`, `terms`, `scheme`, `vonneumann`, `cells`, `numbers`
assembled matrices: `assemble`, `stepping`, `matrix` with `radius`, `norms`, `transient`, `kreiss`

Everything is pure: arrays in, typed records (`records`) out.
"""
