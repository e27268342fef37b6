"""The demo machine: a ferry on two fully submerged foils, modelled from physics."""
