"""Deal-level variables and the design matrices made from them."""
