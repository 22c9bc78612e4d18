"""An invented workshop: physical models of instruments with a known truth."""
