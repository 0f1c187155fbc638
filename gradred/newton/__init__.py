"""Compiled closed forms and fast sums of the Newtonian field; bare arrays in, arrays out."""
