"""Roughing in flat layers: where a cutter may stand, how a layer is peeled, how the cutter gets about."""
