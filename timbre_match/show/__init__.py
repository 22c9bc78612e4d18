"""For human eyes: tables and figures."""
