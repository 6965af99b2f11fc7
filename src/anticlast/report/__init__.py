"""The page and pictures a machinist keeps: everything that is shown, nothing that is decided."""
