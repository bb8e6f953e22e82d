"""The specification that ``demilune init`` writes."""

STARTER = """\
# Made by Demilune (demilune init): a specification to start from.
# Build it:        demilune build THIS_FILE
# Look at it:      demilune plan THIS_FILE
# All keys:        demilune schema

[kernel.product]               # a table a kernel; its name becomes the routine's name
operation = "matvec"           # matvec, rank1 or quadform
layout = "packed"              # full, packed, band, rfp, tiled or skyline
n = 12                         # rows of the matrix, or "runtime"
dtype = "float32"              # float32, float64, complex64, complex128, int16, int32

# What follows stands at its default; change it or take it out.
triangle = "upper"             # the triangle that is stored: upper or lower
order = "column-major"         # whether strips are columns or rows
structure = "symmetric"        # or "hermitian", for complex types
loop = "fused"                 # dot, axpy or fused; a list makes a kernel for each
block = 1                      # strips at a time
direction = "forward"          # or "backward"
accumulator = "plain"          # plain, wide or compensated
fma = false                    # true: fused multiply-adds, rounded once
alpha = 1                      # y := alpha*A*x + beta*y; a number, or "runtime"
beta = 0
incx = 1                       # strides: a number other than 0, or "runtime"
incy = 1
language = ["c", "python"]
environment = "hosted"         # or "freestanding": no header but stdint.h and stddef.h
"""
