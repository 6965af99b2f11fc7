"""The proof: a virtual cut from read-back motion, and the verdict on it."""
