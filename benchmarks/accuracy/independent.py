"""Calls of other libraries in a child process with a time limit: a hang or a crash is a result, not the end."""

from __future__ import annotations

import multiprocessing
from collections.abc import Callable
from multiprocessing.connection import Connection
from typing import Any

#: Seconds that one call may take.
LIMIT = 20.0


def _serve(pipe: Connection) -> None:
    """Answer calls until the pipe closes."""
    import os
    import warnings

    import numpy as np

    warnings.simplefilter("ignore")
    np.seterr(all="ignore")
    # what a Fortran library prints goes nowhere
    nowhere = os.open(os.devnull, os.O_WRONLY)
    os.dup2(nowhere, 1)
    os.dup2(nowhere, 2)
    while True:
        try:
            function, arguments = pipe.recv()
        except EOFError:
            return
        try:
            pipe.send(("done", function(*arguments)))
        except Exception as error:
            pipe.send(("error", f"{type(error).__name__}: {str(error)[:80]}"))


class Child:
    """One child process, started anew after a hang or a crash.

    ``call`` returns ("done", value), ("error", words), ("hang", "") or ("crash", signal or status).
    """

    def __init__(self, limit: float = LIMIT) -> None:
        self.limit = limit
        self.process: Any = None

    def _start(self) -> None:
        context = multiprocessing.get_context("spawn")
        self.pipe, other = context.Pipe()
        self.process = context.Process(target=_serve, args=(other,), daemon=True)
        self.process.start()
        other.close()

    def call(self, function: Callable[..., Any], *arguments: Any) -> tuple[str, Any]:
        """Return what happened to a function of the top level of a module, and its value."""
        if self.process is None:
            self._start()
            # the libraries are loaded before the clock starts
            self.call(warm)
        try:
            self.pipe.send((function, arguments))
            if not self.pipe.poll(self.limit):
                self.close()
                return "hang", ""
            return self.pipe.recv()
        except (EOFError, ConnectionError):
            self.process.join(5)
            status = self.process.exitcode
            self.process = None
            return "crash", status

    def close(self) -> None:
        """End the child."""
        if self.process is not None:
            self.process.kill()
            self.process.join()
            self.process = None


def warm() -> None:
    """Load the libraries."""
    import control  # noqa: F401
    import scipy.signal  # noqa: F401
    import slycot  # noqa: F401


def scipy_states(numerator: Any, denominator: Any) -> Any:
    """Return A, B, C, D of scipy.signal.tf2ss."""
    import scipy.signal

    return scipy.signal.tf2ss(numerator, denominator)


def control_states(numerator: Any, denominator: Any) -> Any:
    """Return A, B, C, D of control.tf2ss."""
    import control

    made = control.tf2ss(control.TransferFunction(numerator, denominator))
    return made.A, made.B, made.C, made.D


def slycot_states(numerator: Any, denominator: Any) -> Any:
    """Return A, B, C, D of slycot's td04ad."""
    import numpy as np
    import slycot

    d = np.atleast_1d(np.asarray(denominator, dtype=float))
    n = np.zeros((1, 1, d.size))
    n[0, 0, d.size - len(numerator) :] = numerator
    order, A, B, C, D = slycot.td04ad("C", 1, 1, [d.size - 1], d[None, :], n, tol=0.0)
    return A[:order, :order], B[:order], C[:, :order], D


def scipy_coefficients(A: Any, B: Any, C: Any, D: Any) -> Any:
    """Return numerator and denominator of scipy.signal.ss2tf."""
    import scipy.signal

    n, d = scipy.signal.ss2tf(A, B, C, D)
    return n[0], d


def control_coefficients(A: Any, B: Any, C: Any, D: Any) -> Any:
    """Return numerator and denominator of control.ss2tf."""
    import control

    made = control.ss2tf(control.StateSpace(A, B, C, D, remove_useless_states=False))
    return made.num[0][0], made.den[0][0]


def gramian_values(A: Any, B: Any, C: Any) -> Any:
    """Return the roots of the eigenvalues of the product of two Gramians by scipy.linalg."""
    import numpy as np
    import scipy.linalg

    P = scipy.linalg.solve_continuous_lyapunov(A, -B @ B.T)
    Q = scipy.linalg.solve_continuous_lyapunov(A.T, -C.T @ C)
    return np.sort(np.sqrt(np.abs(scipy.linalg.eigvals(P @ Q))))[::-1]


def control_values(A: Any, B: Any, C: Any) -> Any:
    """Return control's Hankel singular values."""
    import control
    import numpy as np

    made = control.StateSpace(A, B, C, np.zeros((C.shape[0], B.shape[1])), remove_useless_states=False)
    return np.sort(np.asarray(control.hankel_singular_values(made)))[::-1]


def slycot_values(A: Any, B: Any, C: Any) -> Any:
    """Return the Hankel singular values of slycot's ab09ad, which works with Gramian factors of the scaled model."""
    import slycot

    n, m, p = A.shape[0], B.shape[1], C.shape[0]
    return slycot.ab09ad("C", "B", "S", n, m, p, A.copy(), B.copy(), C.copy(), nr=None, tol=0.0)[-1]
