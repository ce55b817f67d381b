"""Makes the helpers of this folder (``open_volumes``) importable from every test."""

from threadpoolctl import threadpool_limits

# Two test processes share the cores: linear algebra on one thread in each.
threadpool_limits(1, user_api="blas")
