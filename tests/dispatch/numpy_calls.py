"""One call or more of every NumPy function that has a route, as expressions on values of the state.

x is (2, 3), v and w are (3,), q is a symmetric positive definite (3, 3), m = x > 0, s a 0-d value, c a plain array of
shape (3,), o and u are arrays of the state that are written to, of shapes (2, 3) and (3,). Calls are separated by `;`.
"""

from __future__ import annotations

__all__ = ["CALLS", "METHODS", "UFUNC_CALLS"]

_FUNCTIONS = """
all(x); all(x, 0, keepdims=True); all(x, where=m)
allclose(x, x); allclose(x, x + 1, 1e-3, 1e-4, equal_nan=True)
amax(x, axis=1); amax(x, 0, o[0])
amin(x); amin(x, initial=-3.0, where=m)
angle(x); angle(x, deg=True)
any(x, axis=1, keepdims=True); any(x, where=m)
append(x, [[0.1, 0.2, 0.3]], 0); append(v, s); append(c, v)
argmax(x); argmax(x, 1, keepdims=True)
argmin(x, axis=0)
argpartition(v, 1); argpartition(x, 1, axis=1, kind="introselect")
argsort(x); argsort(x, axis=0, kind="stable"); argsort(v, stable=True)
argwhere(x)
around(x, 1); around(x, decimals=2, out=o)
array2string(np.full(2, 0.5)); array2string(np.full(2, 0.5), precision=3, separator=",")
array_equal(x, x); array_equal(x, v, equal_nan=True)
array_equiv(x, x)
array_repr(np.full(2, 0.5)); array_repr(np.full(2, 0.5), precision=3)
array_split(x, 2, 1); array_split(v, indices_or_sections=2)
array_str(np.full(2, 0.5)); array_str(np.full(2, 0.5), precision=3)
astype(x, float); astype(x, int, copy=False)
atleast_1d(s); atleast_1d(x, s)
atleast_2d(v); atleast_2d(v, s)
atleast_3d(x)
average(x); average(x, 0); average(x, axis=1, weights=v); average(x, weights=abs(x), returned=True); \
average(x, 1, keepdims=True, weights=[0.2, 0.3, 0.4])
bincount(k, v); bincount(k, weights=[0.1, 0.2, 0.3], minlength=9)
block([[x, x], [x, x]]); block([v, c])
broadcast_arrays(x, v)
broadcast_to(v, (2, 3), subok=False)
can_cast(x, float)
choose(k % 2, [v, w]); choose(k % 2, [v, 0.3], mode="wrap"); choose(k % 2, [[0.1, 0.2, 0.3], v])
clip(x, 0.1, 0.7); clip(x, min=0.3); clip(x, a_min=None, a_max=0.1, out=o); clip(0.3, x, 0.7); clip(x, v, 2)
column_stack([v, w]); column_stack((x, x))
common_type(x, v)
compress([True, False, True], v); compress([True, False], x, axis=0)
concatenate([x, x], 1); concatenate([[[0.1, 0.2, 0.3]], x], axis=0); concatenate([v, w], dtype=float); \
concatenate([v, v[:0]], casting="same_kind")
convolve(v, w); convolve(v, [0.1, 0.2]); convolve(v, w, mode="same"); convolve(v, [0.1, 0.2, 0.3, 0.4], "valid")
copy(x, order="F", subok=True)
copyto(o, x); copyto(o, 0.3, where=m); copyto(o, v, casting="same_kind")
corrcoef(x); corrcoef(v, w, rowvar=True, dtype=float)
correlate(v, w); correlate(v, [0.1, 0.2], mode="full"); correlate(v[:2], w, "same")
count_nonzero(x, 0, keepdims=True)
cov(x); cov(v, y=w, bias=True, fweights=[1, 2, 3]); cov(x, ddof=0, aweights=[0.1, 0.2, 0.3])
cross(v, w); cross(x, x[::-1], axis=1)
cumprod(x); cumprod(x, 1); cumprod(x, axis=0, dtype=float, out=o)
cumsum(x); cumsum(x, 1); cumsum(x, axis=0, out=o)
cumulative_prod(x, axis=1); cumulative_prod(v, include_initial=True)
cumulative_sum(x, axis=1, include_initial=True); cumulative_sum(v, dtype=float)
delete(v, 1); delete(x, [0, 2], axis=1)
diag(v); diag(q, k=1)
diag_indices_from(q)
diagflat(v, 1)
diagonal(q); diagonal(q, offset=1, axis1=1, axis2=0)
diff(x); diff(x, 2, axis=1); diff(x, prepend=0.1); diff(x, axis=0, append=v[None], prepend=[[0.1, 0.2, 0.3]])
digitize(x, [-1.0, 0.3, 2.0]); digitize(v, c, right=True)
dot(v, w); dot(q, q); dot(x, v); dot(x, q, out=o); dot(c, v); dot(0.3, v); dot(q, np.stack([q, q]))
dsplit(x.reshape(1, 1, 6), 2)
dstack([x, x])
ediff1d(v); ediff1d(v, to_end=0.3, to_begin=[0.1, 0.2])
einsum("ij,j->i", x, v); einsum("ij,kj", x, x); einsum("ii", q); einsum("ij->ji", x); einsum("...j,j->...", x, v); \
einsum("i,j,ij->", v, w, q, optimize=True); einsum("ij,jk,kl->il", x, q, q); einsum("ii->i", q); einsum("ij->", x); \
einsum(x, [0, 1], v, [1], [0]); einsum("i,i", v, w, out=np.array(0.3)); einsum("ij,j->ij", x, c)
einsum_path("ij,j->i", x, v, optimize="greedy")
empty_like(x, float, "F", subok=True, shape=4)
expand_dims(x, axis=1)
extract(m, x)
fill_diagonal(o, 0.3); fill_diagonal(q, v, wrap=True)
fix(x); fix(x, out=o)
flatnonzero(x)
flip(x, 0); flip(x)
fliplr(x)
flipud(x)
full_like(x, 0.1); full_like(x, fill_value=0.3, shape=(2,)); full_like(x, 0.1, int)
geomspace(abs(s), 9.0, 4); geomspace(0.1, abs(v), num=3, axis=1, endpoint=False)
gradient(v); gradient(x, 0.5, axis=1); gradient(v, c, edge_order=2); gradient(x)
histogram(v, 4); histogram(v, bins=[-2.0, 0.1, 6.0], density=True); histogram(v, 3, range=(0, 1), weights=w)
histogram2d(v, w, 2); histogram2d(v, w, bins=3, range=[[0, 1], [0, 1]], density=True)
histogram_bin_edges(v, bins=3); histogram_bin_edges(v, range=(0, 1))
histogramdd(x.T, 2)
hsplit(x, 3)
hstack([v, w]); hstack([v, 0.3], dtype=float, casting="same_kind")
i0(x)
imag(x)
inner(v, w); inner(x, x); inner(x, c); inner(0.3, v)
insert(v, 1, 0.3); insert(x, [0, 2], s, axis=1)
interp(x, [-2.0, 0.3, 6.0], [0.1, 0.7, 0.2]); interp(s, c, v, left=0.0, right=1.0); \
interp(v, [0.0, 1.0], w[:2], period=3)
intersect1d(v, v[:2]); intersect1d(v, c, assume_unique=True, return_indices=True)
iscomplex(x)
iscomplexobj(x)
isclose(x, 0.37); isclose(x, x, rtol=1e-3, atol=0.0, equal_nan=True)
isin(x, v); isin(x, [0.1, 0.2], assume_unique=True, invert=True)
isneginf(x)
isposinf(x)
isreal(x)
isrealobj(x)
ix_(k % 2, m[0])
kron(v, w); kron(x, c)
lexsort((v, w)); lexsort(x, axis=0)
linspace(0.0, s, 4); linspace(v, 1.0, num=3, endpoint=False, axis=1); linspace(s, 3, 4, retstep=True); linspace(v, w, 3)
logspace(0.0, s, 4); logspace(v, 1.0, num=3, base=2.0, axis=1)
matrix_transpose(x)
max(x, axis=0, out=None); max(x, initial=0.3, where=m, keepdims=True)
may_share_memory(x, x[0])
mean(x); mean(x, 0); mean(x, axis=1, keepdims=True, dtype=float); mean(x, where=m); mean(x, 0, None, o[1]); mean(m); \
mean(m, axis=0)
median(x); median(x, axis=1, keepdims=True); median(x, 0, out=u)
meshgrid(v, w); meshgrid(v, c, indexing="ij", sparse=True, copy=True)
min(x, 1, keepdims=True); min(s)
moveaxis(x, 0, 1)
nan_to_num(x / 0.0 * 0.0); nan_to_num(v, copy=True, nan=0.1, posinf=0.2, neginf=-0.3)
nanargmax(x, 1); nanargmax(x)
nanargmin(x, axis=0, keepdims=True)
nancumprod(x, 1); nancumprod(x)
nancumsum(x, axis=0); nancumsum(x)
nanmax(x, 0); nanmax(x, initial=9.0, where=m, keepdims=True)
nanmean(x); nanmean(x, axis=1, keepdims=True)
nanmedian(x, axis=1)
nanmin(x); nanmin(x, 0, keepdims=True)
nanpercentile(x, 30.0, axis=1, method="linear")
nanprod(x, 1); nanprod(x, where=m, initial=0.3)
nanquantile(x, [0.1, 0.5], keepdims=True)
nanstd(x, 0); nanstd(x, ddof=1)
nansum(x, axis=0); nansum(x, keepdims=True, initial=0.3)
nanvar(x, 0, ddof=1)
ndim(x)
nonzero(x)
ones_like(x, order="K", subok=True, shape=(2, 2), dtype=float)
outer(v, w); outer(x, c); outer(v, w, out=q)
packbits(m); packbits(m, axis=1, bitorder="little")
pad(v, 2); pad(x, 1, mode="edge"); pad(v, 2, constant_values=0.3); pad(v, 2, "maximum", stat_length=2)
partition(v, 1); partition(x, 1, axis=0, kind="introselect")
percentile(x, 30); percentile(x, [10, 90.0], axis=1, method="lower", keepdims=True)
place(o, m, [0.1, 0.2])
poly(v)
polyadd(v, w)
polyder(v, m=1)
polydiv(v, w[:2])
polyfit(c, v, 1); polyfit(c, v, deg=1, w=[0.1, 0.2, 0.3])
polyint(v, m=1, k=0.3)
polymul(v, w)
polysub(v, [0.1, 0.2])
polyval(v, x); polyval([0.1, 0.2, 0.3], x)
prod(x); prod(x, 0); prod(x, axis=(0, 1), keepdims=True, initial=0.3, where=m, dtype=float); prod(x, 0, out=u)
ptp(x); ptp(x, axis=1, keepdims=True); ptp(x, 0, u)
put(o, [0, 4], [0.1, 0.2]); put(o, k % 3, v, mode="clip")
put_along_axis(o, np.argsort(x, axis=1), x, axis=1); put_along_axis(o, np.array([[0], [1]]), 0.3, 1)
putmask(o, m, 0.3); putmask(o, mask=m, values=x)
quantile(x, 0.3); quantile(x, q=[0.1, 0.9], axis=0, method="higher", keepdims=True)
ravel(x, "F")
ravel_multi_index((k % 2, k % 3), (2, 3), mode="raise", order="C")
real(x)
real_if_close(x, tol=10)
repeat(x, 2, 1); repeat(v, repeats=[1, 0, 2])
reshape(x, (3, 2), order="F", copy=True); reshape(x, shape=6)
resize(x, (3, 3))
result_type(x, np.float64, 3)
roll(x, 1, axis=1); roll(x, shift=2)
rollaxis(x, 1, start=0)
roots(v[1:])
rot90(x, k=1, axes=(1, 0))
round(x, 2); round(x, decimals=1, out=o); round(s)
searchsorted(np.sort(v), 0.3); searchsorted(c, x, side="right"); searchsorted(v, w, sorter=np.argsort(v))
select([m, x < -1], [x, 0.3]); select([m], [0.1], default=x); select([m], [[0.1, 0.2, 0.3]], v)
setdiff1d(v, v[:1]); setdiff1d(v, c, assume_unique=True)
setxor1d(v, w, assume_unique=True)
shape(x)
shares_memory(x, x[0])
sinc(x)
size(x, 1)
sort(x); sort(x, 0, kind="stable"); sort(v, stable=True)
split(x, 3, axis=1)
squeeze(x[:1], axis=0)
stack([v, w], axis=-1); stack([v, c], dtype=float, casting="same_kind"); stack([v, w], out=o[:, :])
std(x); std(x, 0, ddof=1); std(x, axis=1, keepdims=True, dtype=float); std(x, 0, None, u)
sum(x); sum(x, 0); sum(x, 1); sum(x, axis=(0, 1), keepdims=True); sum(x, initial=0.3, where=m); sum(x, 0, float, u); \
sum(x[:0], axis=0); sum(s); sum(x.T, axis=0)
swapaxes(x, 0, 1)
take(x, [0, 5], mode="wrap"); take(x, indices=1, axis=1); take(v, [0, 1, 1], out=u)
take_along_axis(x, np.argsort(x, axis=1), axis=1); take_along_axis(v, np.argsort(v))
tensordot(x, q, 1); tensordot(x, x, axes=([0], [0])); tensordot(v, w, axes=0); tensordot(x, x)
tile(x, (2, 1))
trace(q); trace(q, 1); trace(q, offset=-1, axis1=1, axis2=0, dtype=float)
transpose(x, (1, 0))
trapezoid(x); trapezoid(x, dx=0.3, axis=0); trapezoid(v, x=c); trapezoid(v, w)
tril(q); tril(q, -1)
tril_indices_from(q, k=1)
trim_zeros(np.concatenate([v * 0, v])); trim_zeros(v, trim="f")
triu(q, k=1)
triu_indices_from(q)
union1d(v, w)
unique(v); unique(np.repeat(v, 2), return_index=True, return_inverse=True, return_counts=True, equal_nan=True); \
unique(x, axis=0)
unique_all(v)
unique_counts(v)
unique_inverse(v)
unique_values(v)
unpackbits(np.packbits(m), axis=None, count=5, bitorder="big")
unravel_index(k % 3, (2, 3), order="C")
unstack(x, axis=1)
unwrap(v * 3); unwrap(x, discont=4.0, axis=0, period=3.0)
vander(v); vander(v, 2, increasing=True)
var(x); var(x, 0, ddof=1); var(x, axis=(0, 1), keepdims=True); var(x, 0, float, u)
vdot(v, w); vdot(x, x)
vsplit(x, 2)
vstack([v, w]); vstack([v, c], dtype=float, casting="same_kind")
where(m, x, 0.1); where([[True], [False]], 0.3, x); where(x)
zeros_like(x, dtype=np.float64, shape=(2,)); zeros_like(x, bool)
fft.fftshift(v, axes=0)
fft.ifftshift(x)
fft.hfft(v); fft.hfft(x, n=4, axis=1, norm="ortho")
fft.irfft(v, 4); fft.irfft(x, axis=0)
fft.irfft2(q, s=(2, 2), axes=(0, 1))
fft.irfftn(q, norm="forward")
lib.stride_tricks.sliding_window_view(v, 2); lib.stride_tricks.sliding_window_view(x, window_shape=2, axis=1)
emath.arccos(abs(x) / 7)
emath.arcsin(x / 7)
emath.arctanh(x / 7)
emath.log(abs(x))
emath.log10(abs(x))
emath.log2(abs(x))
emath.logn(2.0, abs(x))
emath.power(abs(x), 0.3)
emath.sqrt(abs(x))
linalg.cholesky(q); linalg.cholesky(np.stack([q, q]), upper=True)
linalg.cond(q); linalg.cond(q, p=1)
linalg.cross(v, w); linalg.cross(x, x[::-1], axis=1)
linalg.det(q)
linalg.diagonal(q, offset=1)
linalg.eig(q)
linalg.eigh(q, UPLO="U")
linalg.eigvals(q)
linalg.eigvalsh(q)
linalg.inv(q)
linalg.lstsq(q, v); linalg.lstsq(q, v, rcond=1e-3)
linalg.matmul(x, q); linalg.matmul(np.stack([q, q]), q)
linalg.matrix_norm(q, ord=1, keepdims=True)
linalg.matrix_power(q, 3)
linalg.matrix_rank(q); linalg.matrix_rank(q, hermitian=True, rtol=0.1)
linalg.matrix_transpose(x)
linalg.multi_dot([x, q, v])
linalg.norm(v); linalg.norm(x, ord=1, axis=0, keepdims=True)
linalg.outer(v, c)
linalg.pinv(q); linalg.pinv(q, rcond=1e-2)
linalg.qr(q); linalg.qr(q, mode="r")
linalg.slogdet(q)
linalg.solve(q, v); linalg.solve(q, q); linalg.solve(np.stack([q, 2 * q]), q)
linalg.svd(q); linalg.svd(x, full_matrices=False, compute_uv=False)
linalg.svdvals(x)
linalg.tensordot(x, q, axes=1)
linalg.tensorinv(q.reshape(3, 3), ind=1)
linalg.tensorsolve(q, v)
linalg.trace(q, offset=1, dtype=float); linalg.trace(np.stack([q, q]))
linalg.vecdot(x, v); linalg.vecdot(x, x, axis=0)
linalg.vector_norm(x, ord=3, axis=1, keepdims=True)
polynomial.polynomial.polygrid2d(v, w, q)
polynomial.polynomial.polyval2d(v, w, q)
"""

CALLS: dict[str, list[str]] = {}
for _line in _FUNCTIONS.replace("\\\n", "").strip().splitlines():
    _calls = [f"np.{call.strip()}" for call in _line.split(";")]
    _home = _calls[0].partition("(")[0].replace("np.", "numpy.", 1).replace("numpy.emath", "numpy.lib.scimath")
    CALLS[_home] = _calls

_UFUNCS = """
clip: np.clip(x, 0.1, 0.7)
conjugate: np.conjugate(x); x.conj(); np.conj(s)
divmod: np.divmod(x, 0.3); divmod(x, 2); divmod(7.0, x); divmod(s, 0.3)
frexp: np.frexp(x); np.frexp(s)
ldexp: np.ldexp(x, 3); np.ldexp(x, [1, 2, 3]); np.ldexp(s, -2); np.ldexp(x, k)
matmul: x @ q; q @ v; v @ q; v @ w; c @ v; np.eye(3) @ x.T; np.matmul(x, q, out=o); np.stack([q, q]) @ v; x @ np.eye(3)
matvec: np.matvec(q, x)
modf: np.modf(x); np.modf(s)
nextafter: np.nextafter(x, 9.0); np.nextafter(s, -9.0); np.nextafter(x, x[::-1])
spacing: np.spacing(x); np.spacing(s)
vecdot: np.vecdot(x, v)
vecmat: np.vecmat(v, q)
bitwise_and: np.bitwise_and(k, 3)
bitwise_count: np.bitwise_count(k)
bitwise_or: np.bitwise_or(k, 1)
bitwise_xor: np.bitwise_xor(k, k + 1)
gcd: np.gcd(k, 4)
invert: np.invert(m)
lcm: np.lcm(k, 3)
left_shift: np.left_shift(k, 2)
right_shift: k >> 1
"""
UFUNC_CALLS: dict[str, list[str]] = {}
for _line in _UFUNCS.strip().splitlines():
    _name, _, _text = _line.partition(": ")
    UFUNC_CALLS[_name] = [call.strip() for call in _text.split(";")]

METHODS = [
    "x.sum()",
    "x.sum(0)",
    "x.sum(axis=1, keepdims=True)",
    "x.mean()",
    "x.mean(0)",
    "x.std()",
    "x.var(0, ddof=1)",
    "x.cumsum()",
    "x.cumsum(1)",
    "x.cumprod(0)",
    "x.prod()",
    "x.dot(v)",
    "v.dot(c)",
    "x.argmax()",
    "x.argmin(1)",
    "v.argsort()",
    "x.round(1)",
    "q.trace()",
    "q.diagonal(1)",
    "np.sort(v).searchsorted(0.3)",
    "x.compress([True, False], axis=0)",
    "x.clip(0.1, 0.7, out=o)",
    "x.max(initial=0.3)",
    "s.sum()",
    "s.mean()",
    "s.max()",
    "s.round(2)",
    "round(s, 2)",
    "x.conj()",
    "s.clip(0.1, 0.3)",
    "m.mean()",
    "m.mean(axis=0) * 0.3",
    "k.std()",
    "k.dot(c)",
    "k.var(0)",
    "c @ k",
    "np.dot(c, m[0])",
    "np.dot(k, k)",
    "x.ravel().argpartition(2)",
    "np.add.reduce(x)",
    "np.add.reduce(x, axis=1, keepdims=True)",
    "np.add.accumulate(x)",
    "np.multiply.reduce(x, 1)",
    "np.multiply.accumulate(x, axis=1)",
    "np.maximum.accumulate(x)",
    "np.minimum.reduce(x, axis=None)",
    "np.fmax.reduce(x, 1)",
    "np.logical_and.reduce(x)",
    "np.logical_or.reduce(x, axis=1)",
    "np.subtract.reduce(x, 1)",
    "np.divide.reduce(x, 0)",
    "np.add.outer(v, w)",
    "np.multiply.outer(x, c)",
    "np.subtract.outer(v, s)",
    "np.less.outer(v, w)",
    "np.maximum.reduce(x, initial=0.3, where=m)",
    "np.add.reduce(x, initial=0.3)",
    "np.add.reduce(x, out=u)",
    "np.add(x, 0.3, out=o, where=m)",
    "np.sqrt(x, out=o, where=m)",
    "np.divide(1.0, v, out=u, where=v > 0.1)",
    "np.multiply(v, w, where=[True, False, True], out=np.zeros(3))",
    "np.add(x, 0.3, dtype=float)",
    "np.exp(x, where=True, casting='same_kind', order='K', subok=False)",
    "np.modf(x, out=(o, np.zeros((2, 3))))",
    "np.greater(x, 0.3, out=np.zeros((2, 3), bool), where=m)",
    "np.linspace(0, 1, 3).clip(v, 2)",
]
