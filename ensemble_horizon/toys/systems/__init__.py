"""The toy systems, one module for a family, and the registry that knows them by name.

In reading order: `spiral`, `van_der_pol`, `rossler`, `ring`, `lorenz`, `lorenz_two_scales`,
`channel_basis`, `channel`, `gyre_floats`, `gravity`, `few_bodies`, `planets`, `registry`.
"""
