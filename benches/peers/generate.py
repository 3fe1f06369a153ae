"""Synthetic plant generator: layered, recycle-bearing network of mixers, splitters, two-sided heat exchangers.

All data are invented. Usage: generate.py N SEED OUT.json
Variables x = [m_0..m_{N-1}, T_0..T_{N-1}]  (kg/s, K);  h(T)=a*t+b*t^2, t=T-273.15 (kJ/kg).
Equations, in the order of 'eqs': ["mass", [ins],[outs]], ["energy", [ins],[outs]], ["teq", a, b] (T_a = T_b);
each has a scale 'escale': scaled residual = f/escale.  Bilinear energy: sum m h(T) in - out = 0.
"""
import sys, json, numpy as np, scipy.sparse as sp, scipy.sparse.linalg as sl
A_H, B_H, T0 = 4.0, 8e-4, 273.15
h = lambda T: A_H*(T-T0)+B_H*(T-T0)**2
hinv = lambda H: T0+(-A_H+np.sqrt(A_H*A_H+4*B_H*H))/(2*B_H)

def topology(N, rng):
    w = max(4, int(round(0.6*N**0.5)))
    ns = 0; units = []; feeds = []
    def new():
        nonlocal ns; ns += 1; return ns-1
    pool = []
    for _ in range(w): s = new(); pool.append(s); feeds.append(s)
    pend = []   # recycle streams waiting for a producer: (stream, pos, layer)
    layer = 0
    while ns < N:
        layer += 1; nxt = []; i = 0
        while i < len(pool):
            a = pool[i]; b = pool[i+1] if i+1 < len(pool) else None
            if ns >= N: nxt.append(a); i += 1; continue
            width = len(nxt)+len(pool)-i
            u = rng.random(); pos = len(nxt)
            if rng.random() < 0.10:            # product leaves, a fresh feed takes its place
                s = new(); feeds.append(s); nxt.append(s); i += 1; continue
            if u < 0.40 and b is not None and ns+2 <= N:
                c, d = new(), new(); units.append(("hx", [a, b], [c, d])); nxt += [c, d]; i += 2
            elif u < 0.70 and width <= 1.2*w and ns+2 <= N:
                cand = [p for p in pend if abs(p[1]-pos) <= 2 and 1 <= layer-p[2] <= 8]
                if cand:
                    p = cand[0]; pend.remove(p); c = new(); units.append(("split", [a], [c, p[0]])); nxt.append(c)
                else:
                    c, d = new(), new(); units.append(("split", [a], [c, d])); nxt += [c, d]
                i += 1
            elif u < 0.92 and b is not None and ns+2 <= N:
                if rng.random() < 0.3 and len(pool) > 2:   # mixer with a recycle inlet
                    r, c = new(), new(); units.append(("mix", [a, r], [c])); pend.append((r, pos, layer)); nxt.append(c); i += 1
                elif width >= 0.8*w:
                    c = new(); units.append(("mix", [a, b], [c])); nxt.append(c); i += 2
                else: nxt.append(a); i += 1
            else:
                nxt.append(a); i += 1
        pool = nxt
    prod = set(s for u in units for s in u[2])
    feeds = [s for s in range(ns) if s not in prod]
    return ns, units, feeds, w

def generate(N, seed, fm=0.6):
    rng = np.random.default_rng([N, seed])
    n, units, feeds, w = topology(N, rng)
    # true flows: linear system with split fractions
    R, C, V, b = [], [], [], np.zeros(n); row = 0
    def add(r, c, v): R.append(r); C.append(c); V.append(v)
    for f in feeds: add(row, f, 1.); b[row] = np.exp(rng.uniform(np.log(5), np.log(80))); row += 1
    for t, i, o in units:
        if t == "mix": add(row, o[0], 1.); [add(row, s, -1.) for s in i]; row += 1
        elif t == "split":
            fr = rng.uniform(0.25, 0.75)
            add(row, o[0], 1.); add(row, i[0], -fr); row += 1
            add(row, o[1], 1.); add(row, i[0], -(1-fr)); row += 1
        else:
            for p, q in zip(i, o): add(row, q, 1.); add(row, p, -1.); row += 1
    m = sl.spsolve(sp.csc_matrix((V, (R, C)), shape=(n, n)), b)
    R, C, V, b = [], [], [], np.zeros(n); row = 0
    for f in feeds: add(row, f, 1.); b[row] = h(rng.uniform(300, 800)); row += 1
    for t, i, o in units:
        if t == "mix": add(row, o[0], m[o[0]]); [add(row, s, -m[s]) for s in i]; row += 1
        elif t == "split":
            for s in o: add(row, s, 1.); add(row, i[0], -1.); row += 1
        else:
            e = rng.uniform(0.3, 0.8)*min(m[i[0]], m[i[1]])
            for p, q, oth in ((i[0], o[0], i[1]), (i[1], o[1], i[0])):
                add(row, q, m[p]); add(row, p, -m[p]+e); add(row, oth, -e); row += 1
    T = hinv(sl.spsolve(sp.csc_matrix((V, (R, C)), shape=(n, n)), b))
    assert m.min() > 0 and T.min() > 290 and T.max() < 810
    x = np.concatenate([m, T]); sig = np.concatenate([0.01*m, np.full(n, .5)])
    meas = rng.random(2*n) < fm
    y = x + sig*rng.standard_normal(2*n)
    guess = np.concatenate([m*rng.uniform(.8, 1.2, n), T+rng.uniform(-20, 20, n)])
    x0 = np.where(meas, y, guess)
    eqs, es = [], []
    for t, i, o in units:
        if t == "hx":
            for p, q in zip(i, o): eqs.append(["mass", [p], [q]]); es.append(m[p])
        else: eqs.append(["mass", i, o]); es.append(sum(m[s] for s in i))
        if t == "split":
            for s in o: eqs.append(["teq", i[0], s]); es.append(100.)
        else: eqs.append(["energy", i, o]); es.append(float(sum(m[s]*h(T[s]) for s in i)))
    xs = np.concatenate([m, np.full(n, 100.)])
    return dict(n=n, seed=seed, width=w, units=[list(u) for u in units], eqs=eqs, escale=[float(v) for v in es],
        xscale=xs.tolist(), meas=[int(v) for v in meas], y=y.tolist(), sigma=sig.tolist(), x0=x0.tolist(), truth=x.tolist())
if __name__ == "__main__":
    d = generate(int(sys.argv[1]), int(sys.argv[2])); json.dump(d, open(sys.argv[3], "w"))
    rec = len(d["units"]); print(d["n"], "width", d["width"], "units", rec, "eqs", len(d["eqs"]), "meas", sum(d["meas"]))
