"""From axis paths to program text: nothing is planned here, and nothing here is read back."""
