"""JIT-compiled loops: arrays and scalars in, arrays and scalars out.

Nothing here knows a class of the package. Kernels write to buffers that their caller owns,
return small integer statuses and never raise.
"""
