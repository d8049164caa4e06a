"""Density-based layout optimiser that made the sample images: flow, heat, length scales, moving asymptotes.

Method: Brinkman-penalised Stokes flow (T. Borrvall and J. Petersson, "Topology optimization of
fluids in Stokes flow", Int. J. Numer. Meth. Fluids 41, 2003) between ports held at given pressures,
upwind convection and conduction of heat, discrete adjoint gradients, cone filter, projection and the
method of moving asymptotes (K. Svanberg, Int. J. Numer. Meth. Eng. 24, 1987). It needs numpy and
scipy only, and nothing of morph: it stands for the engineer's own optimiser.

Limits: two-dimensional, steady, laminar without inertia, everything dimensionless. Lengths are in
sheet heights; the mm appear only when the density is laid on a sheet.
"""
