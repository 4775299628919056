"""Child process of the second opinion: the step by scipy.signal or slycot, its response on standard output.

Run by path, with isolated imports: it shares nothing with the package but the request. slycot is GPL-2.0 and is
imported here only.
"""

import json
import resource
import sys


class Inapplicable(Exception):
    """The library has no routine for this step."""


def main() -> None:
    """Answer one request from standard input, or, with a third argument, one a line until the input ends."""
    memory, seconds = int(sys.argv[1]), int(sys.argv[2])
    resource.setrlimit(resource.RLIMIT_AS, (memory, memory))
    resource.setrlimit(resource.RLIMIT_CORE, (0, 0))
    if len(sys.argv) > 3:
        # whoever asks many times keeps the time of each answer itself
        for line in sys.stdin:
            sys.stdout.write(json.dumps(answered(json.loads(line))) + "\n")
            sys.stdout.flush()
        return
    resource.setrlimit(resource.RLIMIT_CPU, (seconds, seconds + 1))
    json.dump(answered(json.load(sys.stdin)), sys.stdout)


def answered(request):
    """Return the answer to a request, or the library's error in its place."""
    answer = {"by": ""}
    try:
        import numpy as np

        with np.errstate(all="ignore"):
            verbs = {"convert": convert, "minimal": minimal, "reduce": reduce}
            answer["by"], response = verbs[request["step"]](request)
        answer["real"], answer["imaginary"] = response.real.tolist(), response.imag.tolist()
    except Inapplicable as error:
        answer.update(error=str(error), inapplicable=True)
    except MemoryError:
        answer.update(error="memory limit reached")
    except Exception as error:  # whatever the library raises is its own failure and is reported as such
        answer.update(error=f"{type(error).__name__}: {error}")
    return answer


def points(request):
    """Return s or z at the requested frequencies."""
    import numpy as np

    w = np.array(request["frequency"])
    return 1j * w if request["period"] is None else np.exp(1j * w * request["period"])


def states(A, B, C, D, E, s):
    """Return C (sE - A)^-1 B + D."""
    import numpy as np

    E = np.eye(A.shape[0]) if E is None else E
    return np.array([C @ np.linalg.solve(x * E - A, B) + D if A.size else D for x in s], dtype=complex)


def arrays(fields):
    """Return the matrices of a state model."""
    import numpy as np

    A, B, C, D = (np.array(fields[name], dtype=float) for name in "ABCD")
    n = A.shape[0]
    E = None if fields["E"] is None else np.array(fields["E"], dtype=float)
    return A.reshape(n, n), B.reshape(n, -1) if n else np.zeros((0, D.shape[1])), C.reshape(D.shape[0], n), D, E


def complex_list(pair):
    """Return a complex vector from [real, imaginary]."""
    import numpy as np

    return np.array(pair[0]) + 1j * np.array(pair[1])


def convert(request):
    """Return the response of the target by scipy.signal's own route through the requested kind, channel by channel."""
    import numpy as np
    from scipy import signal

    kind, to, fields, s = request["kind"], request["options"]["to"], request["fields"], points(request)
    p, m = request["shape"]
    by = "scipy.signal"
    if kind == "state-space":
        A, B, C, D, E = arrays(fields)
        if E is not None:
            raise Inapplicable("scipy.signal has no descriptor models")
        if to == "state-space":
            return by, states(A, B, C, D, None, s)
        values = np.empty((s.size, p, m), dtype=complex)
        for j in range(m):
            numerators, denominator = signal.ss2tf(A, B, C, D, input=j)
            for i in range(p):
                values[:, i, j] = through(signal, "transfer-function", (numerators[i], denominator), to, s)
        return by, values
    values = np.empty((s.size, p, m), dtype=complex)
    if kind == "pole-residue":
        poles = complex_list(fields["poles"])
        residues = complex_list(fields["residues"]).reshape(poles.size, p, m)
        direct = np.array(fields["direct"], dtype=float)
        if np.any(np.array(fields["powers"]) != 1) or direct.shape[0] != 1:
            raise Inapplicable("repeated poles and polynomial parts have no counterpart in scipy.signal")
        for i in range(p):
            for j in range(m):
                n, d = signal.invres(residues[:, i, j], poles, direct[0, i, j : j + 1] if direct[0, i, j] else [])
                values[:, i, j] = through(signal, "transfer-function", (np.real(n), np.real(d)), to, s)
        return by, values
    if kind == "sections":
        n, d = np.array([1.0]), np.array([1.0])
        for numerator, denominator in fields["sections"]:
            n, d = np.polymul(n, numerator), np.polymul(d, denominator)
        values[:, 0, 0] = through(signal, "transfer-function", (n * fields["gain"], d), to, s)
        return by, values
    for i in range(p):
        for j in range(m):
            if kind == "transfer-function":
                data = (np.array(fields["numerator"][i][j]), np.array(fields["denominator"][i][j]))
            else:
                data = (complex_list(fields["zeros"][i][j]), complex_list(fields["poles"][i][j]), fields["gain"][i][j])
            values[:, i, j] = through(signal, kind, data, to, s)
    return by, values


def through(signal, kind, data, to, s):
    """Convert one channel to the target kind with scipy.signal, and return the response of what came out."""
    import numpy as np

    if kind == "transfer-function" and not np.any(data[0]):
        return np.zeros(s.size, dtype=complex)
    if to == "state-space":
        above, below = data[:2]
        if len(above) > len(below):
            raise Inapplicable("scipy.signal has no improper state models")
        made = signal.tf2ss(*data) if kind == "transfer-function" else signal.zpk2ss(*data)
        A, B, C, D = (np.real(part) for part in made)
        return states(A, B, C, D, None, s)[:, 0, 0] if A.size else np.full(s.size, D[0, 0], dtype=complex)
    if to == "zero-pole-gain":
        z, p, k = signal.tf2zpk(*data) if kind == "transfer-function" else data
        return k * np.prod(s[:, None] - z, axis=1) / np.prod(s[:, None] - p, axis=1)
    n, d = data if kind == "transfer-function" else signal.zpk2tf(*data)
    if to == "pole-residue":
        r, p, k = signal.residue(n, d)
        value, last, power = np.polyval(k, s) if len(k) else np.zeros(s.size, dtype=complex), None, 1
        for residue, pole in zip(r, p, strict=True):
            power = power + 1 if last is not None and abs(pole - last) <= 1e-3 * abs(last) else 1
            value = value + residue / (s - pole) ** power
            last = pole
        return value
    if to == "sections":
        z, p, k = signal.tf2zpk(n, d)
        if len(z) > len(p):
            raise Inapplicable("scipy.signal has no improper sections")
        value = np.ones(s.size, dtype=complex)
        for row in signal.zpk2sos(z, p, k, analog=True, pairing="minimal"):
            value = value * np.polyval(row[:3], s) / np.polyval(row[3:], s)
        return value
    return np.polyval(n, s) / np.polyval(d, s)


def minimal(request):
    """Return the response of slycot's minimal realization (TB01PD), or of control's for one channel of coefficients."""
    import numpy as np

    s = points(request)
    p, m = request["shape"]
    if request["kind"] == "transfer-function" and p * m == 1:
        import control

        n, d = (np.array(request["fields"][name][0][0], dtype=float) for name in ("numerator", "denominator"))
        if len(n) > len(d):
            raise Inapplicable("the independent routine is not called for improper models")
        made = control.TransferFunction(n, d).minreal()
        above, below = made.num[0][0], made.den[0][0]
        by = f"control minreal (order {len(below) - 1})"
        return by, (np.polyval(above, s) / np.polyval(below, s))[:, None, None]
    if request["kind"] != "state-space":
        raise Inapplicable("the independent routines take state models and single transfer functions")
    A, B, C, D, E = arrays(request["fields"])
    n = A.shape[0]
    if E is not None:
        raise Inapplicable("the independent routine has no descriptor models")
    if n < 3:
        raise Inapplicable("the independent routine is not called for orders below 3")
    try:
        import slycot
    except ImportError:
        raise Inapplicable("slycot is not installed") from None
    size = max(m, p)
    b, c = np.zeros((n, size)), np.zeros((size, n))
    b[:, :m], c[:p] = B, C
    Ar, Br, Cr, nr = slycot.tb01pd(n, m, p, A, b, c, job="M", equil="S", tol=0.0)[:4]
    return f"slycot TB01PD (order {nr})", states(Ar[:nr, :nr], Br[:nr, :m], Cr[:p, :nr], D, None, s)


def reduce(request):
    """Return the response of slycot's balanced truncation (AB09AD) or singular perturbation (AB09BD), same order."""
    import numpy as np

    if request["kind"] != "state-space":
        raise Inapplicable("the independent routine takes state models only")
    A, B, C, D, E = arrays(request["fields"])
    order, method = request["options"]["order"], request["options"]["method"]
    if method not in ("balanced-truncation", "singular-perturbation"):
        raise Inapplicable(f"no independent routine for {method}")
    if E is not None:
        raise Inapplicable("the independent routine has no descriptor models")
    n = A.shape[0]
    if n < 3 or not 0 < order < n:
        raise Inapplicable("the independent routine is not called for orders below 3, nor for trivial reductions")
    eigenvalues = np.linalg.eigvals(A)
    sampled = request["period"] is not None
    if np.any(np.abs(eigenvalues) >= 1) if sampled else np.any(eigenvalues.real >= 0):
        raise Inapplicable("the independent routine takes stable models only")
    try:
        import slycot
    except ImportError:
        raise Inapplicable("slycot is not installed") from None
    if method == "singular-perturbation":
        # slycot's wrapper of AB09BD: order, A, B, C, D, Hankel singular values
        made = slycot.ab09bd("D" if sampled else "C", "B", "N", n, B.shape[1], C.shape[0], A, B, C, D, nr=order)
        nr, Ar, Br, Cr, Dr = made[:5]
        return "slycot AB09BD", states(Ar[:nr, :nr], Br[:nr], Cr[:, :nr], Dr, None, points(request))
    made = slycot.ab09ad("D" if sampled else "C", "B", "N", n, B.shape[1], C.shape[0], A, B, C, nr=order)
    nr, Ar, Br, Cr = made[:4]
    return "slycot AB09AD", states(Ar[:nr, :nr], Br[:nr], Cr[:, :nr], D, None, points(request))


if __name__ == "__main__":
    main()
