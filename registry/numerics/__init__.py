"""Arrays in, arrays out: the mathematics of rolling, closing and fitting. Imports numpy, scipy and the standard
library only.
"""
