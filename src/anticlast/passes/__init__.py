"""How the surface is swept: spacing of the passes, their order, links, entries, tilt; the planning half."""
