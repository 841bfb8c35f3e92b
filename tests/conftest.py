"""One BLAS thread for every test: far quicker for matrices of these sizes."""

import pytest


@pytest.fixture(autouse=True, scope="session")
def _one_thread():
    from threadpoolctl import threadpool_limits

    with threadpool_limits(limits=1):
        yield
