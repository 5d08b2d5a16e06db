"""Linear algebra on small matrices: one BLAS thread.

The designs solve thousands of small systems. Threads gain nothing on those, and where other work
keeps the processors busy, waiting for each other slows them down ten times and more.
"""

from threadpoolctl import threadpool_limits

__all__ = ["one_blas_thread"]

one_blas_thread = threadpool_limits.wrap(limits=1, user_api="blas")
