"""Which route each NumPy function takes, by name: every one that NumPy lets an array override, in exactly one group.

exact        moves, selects or compares values; never rounds
rounded      elementwise, one rounding of the result, or of each operation of a short formula
accumulated  sums and products in a stated order: along the axis, first to last, several axes in C order; each product
             and each partial result is rounded to the format, which is the accumulator too. float32 and float64 are
             what NumPy does. Over an axis as long as the run has paths: `whole`
whole        computed in float64 from values of the format and rounded once; listed under reach
refused      not computed, for the reason in the row

Rows are written in the words of rows.py. What a newer NumPy adds is in no row, and taken as `whole`.
"""

from __future__ import annotations

from typing import Literal

from narrowgauge.dispatch.rows import Row, row_of
from narrowgauge.dispatch.setting import Route

__all__ = ["ABOUT", "READING", "ROWS", "WRITING"]

_EXACT = """
all a* axis out keepdims | where
amax a* axis out keepdims initial* where
amin a* axis out keepdims initial* where
any a* axis out keepdims | where
append arr* values* axis
argmax a* axis out | keepdims
argmin a* axis out | keepdims
argpartition a* kth axis kind order!
argsort a* axis kind order! | stable
argwhere a*
array2string a* max_line_width precision suppress_small separator prefix | formatter! threshold edgeitems sign \
 floatmode suffix legacy!
array_equal a1* a2* equal_nan
array_equiv a1* a2*
array_repr arr* max_line_width precision suppress_small
array_split ary* indices_or_sections axis
array_str a* max_line_width precision suppress_small
astype x* dtype | copy device!
atleast_1d *arys*
atleast_2d *arys*
atleast_3d *arys*
block arrays*
broadcast_arrays *args* | subok
broadcast_to array* shape subok
can_cast from_* to casting
choose a choices* out mode
clip a* a_min* a_max* out | min* max* casting! dtype! where! order! subok! signature!
column_stack tup*
common_type *arrays*
compress condition a* axis out
concatenate arrays* axis out | dtype casting
copy a* order subok
copyto dst* src* casting where
count_nonzero a* axis | keepdims
delete arr* obj axis
diag v* k
diag_indices_from arr*
diagflat v* k
diagonal a* offset axis1 axis2
digitize x* bins* right
dsplit ary* indices_or_sections
dstack tup*
einsum_path *operands* | optimize einsum_call!
empty_like prototype* dtype order subok shape | device!
expand_dims a* axis
extract condition arr*
fill_diagonal a* val* wrap
fix x* out
flatnonzero a*
flip m* axis
fliplr m*
flipud m*
full_like a* fill_value* dtype order subok shape | device!
hsplit ary* indices_or_sections
hstack tup* | dtype casting
imag val*
insert arr* obj values* axis
intersect1d ar1* ar2* assume_unique return_indices
iscomplex x*
iscomplexobj x*
isin element* test_elements* assume_unique invert | kind
isneginf x* out
isposinf x* out
isreal x*
isrealobj x*
ix_ *args*
lexsort keys* axis
matrix_transpose x*
max a* axis out keepdims initial* where
may_share_memory a* b* max_work
meshgrid *xi* | copy sparse indexing
min a* axis out keepdims initial* where
moveaxis a* source destination
nan_to_num x* copy nan* posinf* neginf*
nanargmax a* axis out | keepdims
nanargmin a* axis out | keepdims
nanmax a* axis out keepdims initial* where
nanmin a* axis out keepdims initial* where
ndim a*
nonzero a*
ones_like a* dtype order subok shape | device!
packbits a* axis bitorder
pad array* pad_width mode | constant_values* stat_length end_values! reflect_type!
partition a* kth axis kind order!
place arr* mask vals*
put a* ind v* mode
put_along_axis arr* indices values* axis
putmask a* mask values*
ravel a* order
ravel_multi_index multi_index* dims mode order
real val*
real_if_close a* tol
repeat a* repeats axis
reshape a* shape order | copy
resize a* new_shape
result_type *arrays_and_dtypes*
roll a* shift axis
rollaxis a* axis start
rot90 m* k axes
searchsorted a* v* side sorter
select condlist choicelist* default*
setdiff1d ar1* ar2* assume_unique
setxor1d ar1* ar2* assume_unique
shape a*
shares_memory a* b* max_work
size a* axis
sort a* axis kind order! | stable
split ary* indices_or_sections axis
squeeze a* axis
stack arrays* axis out | dtype casting
swapaxes a* axis1 axis2
take a* indices axis out mode
take_along_axis arr* indices axis
tile A* reps
transpose a* axes
tril m* k
tril_indices_from arr* k
trim_zeros filt* trim axis
triu m* k
triu_indices_from arr* k
union1d ar1* ar2*
unique ar* return_index return_inverse return_counts axis | equal_nan sorted
unique_all x*
unique_counts x*
unique_inverse x*
unique_values x*
unpackbits a* axis count bitorder
unravel_index indices* shape order
unstack x* | axis
vsplit ary* indices_or_sections
vstack tup* | dtype casting
where condition* x* y*
zeros_like a* dtype order subok shape | device!
fft.fftshift x* axes
fft.ifftshift x* axes
lib.stride_tricks.sliding_window_view x* window_shape axis | subok writeable
linalg.diagonal x* | offset
linalg.matrix_transpose x*
"""

_ROUNDED = """
around a* decimals out
diff a* n axis prepend* append*
ediff1d ary* to_end* to_begin*
i0 x*
kron a* b*
linalg.outer x1* x2*
outer a* b* out
ptp a* axis out keepdims
round a* decimals out
sinc x*
"""

_ACCUMULATED = """
average a* axis weights* returned | keepdims
convolve a* v* mode
correlate a* v* mode
cumprod a* axis dtype out
cumsum a* axis dtype out
cumulative_prod x* | axis dtype out include_initial
cumulative_sum x* | axis dtype out include_initial
dot a* b* out
einsum *operands* | out optimize dtype! order! casting!
inner a* b*
linalg.cholesky a* | upper
linalg.matmul x1* x2*
linalg.solve a* b*
linalg.tensordot x1* x2* | axes
linalg.trace x* | offset dtype
linalg.vecdot x1* x2* | axis
mean a* axis dtype out keepdims | where
nancumprod a* axis dtype out
nancumsum a* axis dtype out
nanprod a* axis dtype out keepdims initial* where
nansum a* axis dtype out keepdims initial* where
prod a* axis dtype out keepdims initial* where
std a* axis dtype out ddof keepdims | where! mean! correction!
sum a* axis dtype out keepdims initial* where
tensordot a* b* axes
trace a* offset axis1 axis2 dtype out
trapezoid y* x* dx* axis
var a* axis dtype out ddof keepdims | where! mean! correction!
vdot a* b*
"""

_WHOLE = """
allclose a* b* rtol atol equal_nan
angle z* deg
bincount x weights* minlength
corrcoef x* y* rowvar | dtype
cov m* y* rowvar bias ddof fweights aweights* | dtype
cross a* b* axisa axisb axisc axis
geomspace start* stop* num endpoint dtype axis
gradient f* *varargs* | axis edge_order
histogram a* bins* range* density weights*
histogram2d x* y* bins* range* density weights*
histogram_bin_edges a* bins* range* weights*
histogramdd sample* bins* range* density weights*
interp x* xp* fp* left* right* period
isclose a* b* rtol atol equal_nan
linspace start* stop* num endpoint retstep dtype axis | device!
logspace start* stop* num endpoint base* dtype axis
median a* axis out overwrite_input! keepdims
nanmean a* axis dtype out keepdims | where
nanmedian a* axis out overwrite_input! keepdims
nanpercentile a* q axis out overwrite_input! method keepdims | weights*
nanquantile a* q axis out overwrite_input! method keepdims | weights*
nanstd a* axis dtype out ddof keepdims | where mean! correction
nanvar a* axis dtype out ddof keepdims | where mean! correction
percentile a* q axis out overwrite_input! method keepdims | weights*
poly seq_of_zeros*
polyadd a1* a2*
polyder p* m
polydiv u* v*
polyfit x* y* deg rcond full w* cov
polyint p* m k*
polymul a1* a2*
polysub a1* a2*
polyval p* x*
quantile a* q axis out overwrite_input! method keepdims | weights*
roots p*
unwrap p* discont axis | period
vander x* N increasing
fft.hfft a* n axis norm out
fft.irfft a* n axis norm out
fft.irfft2 a* s axes norm out
fft.irfftn a* s axes norm out
lib.scimath.arccos x*
lib.scimath.arcsin x*
lib.scimath.arctanh x*
lib.scimath.log x*
lib.scimath.log10 x*
lib.scimath.log2 x*
lib.scimath.logn n* x*
lib.scimath.power x* p*
lib.scimath.sqrt x*
linalg.cond x* p
linalg.cross x1* x2* | axis
linalg.det a*
linalg.eig a*
linalg.eigh a* UPLO
linalg.eigvals a*
linalg.eigvalsh a* UPLO
linalg.inv a*
linalg.lstsq a* b* rcond
linalg.matrix_norm x* | keepdims ord
linalg.matrix_power a* n
linalg.matrix_rank A* tol hermitian | rtol
linalg.multi_dot arrays* | out
linalg.norm x* ord axis keepdims
linalg.pinv a* rcond hermitian | rtol
linalg.qr a* mode
linalg.slogdet a*
linalg.svd a* full_matrices compute_uv hermitian
linalg.svdvals x*
linalg.tensorinv a* ind
linalg.tensorsolve a* b* axes
linalg.vector_norm x* | axis keepdims ord
polynomial.polynomial.polygrid2d x* y* c*
polynomial.polynomial.polyval2d x* y* c*
"""


def _names(text: str, home: str = "") -> list[str]:
    return [f"numpy.{home}{name}" for name in text.split()]


# the reason, then the functions that it holds for
_REFUSED = {
    "it calls back for each piece; accepted: a loop, np.where or np.select": _names(
        "apply_along_axis apply_over_axes piecewise"
    ),
    "it makes a new array by the example of like=; accepted: without like=": _names(
        "arange array asanyarray asarray ascontiguousarray asfortranarray empty eye frombuffer fromfile fromfunction "
        "fromiter fromstring full genfromtxt identity loadtxt ones require tri zeros"
    ),
    "the state is no date": _names("busday_count busday_offset datetime_as_string is_busday"),
    "it writes the state to a file; accepted: return it": _names("save savetxt savez savez_compressed"),
    "it gives complex numbers, which no format holds; accepted: a kernel of real numbers": [
        *_names("sort_complex"),
        *_names("fft fft2 fftn ifft ifft2 ifftn ihfft rfft rfft2 rfftn", "fft."),
    ],
    "it tells the narrowest type that holds a value, which for the state is the audit's to choose": _names(
        "min_scalar_type"
    ),
    "the state has no fields": _names(
        "append_fields apply_along_fields assign_fields_by_name drop_fields find_duplicates join_by merge_arrays "
        "rec_append_fields rec_drop_fields rec_join recursive_fill_fields rename_fields repack_fields "
        "require_fields stack_arrays structured_to_unstructured unstructured_to_structured",
        "lib.recfunctions.",
    ),
    "the state is no text": [
        *_names("equal greater greater_equal less less_equal not_equal", "char."),
        *_names(
            "_join _rsplit _split _splitlines capitalize center decode encode expandtabs ljust lower mod multiply "
            "partition replace rjust rpartition swapcase title translate upper zfill",
            "strings.",
        ),
    ],
}

ABOUT = frozenset(
    _names(
        "array2string array_repr array_str can_cast common_type einsum_path iscomplexobj isrealobj may_share_memory "
        "ndim result_type shape shares_memory size"
    )
)
"""What they give is about the array, not of its values."""

READING = ABOUT | frozenset(
    _names(
        "all amax amin any append argmax argmin argsort array_equal clip column_stack concatenate copy count_nonzero "
        "digitize dstack hstack isin max min nanmax nanmin repeat roll searchsorted sort stack take tile unique vstack "
        "where"
    )
)
"""Exact ones that neither write nor give a view: a constant array stays one."""

WRITING = frozenset(_names("copyto fill_diagonal place put put_along_axis putmask"))
"""They write into their first argument."""


def _rows() -> dict[str, Row]:
    groups: dict[Route, str] = {
        "exact": _EXACT,
        "rounded": _ROUNDED,
        "accumulated": _ACCUMULATED,
        "whole": _WHOLE,
    }
    listed: list[Row] = []
    for route, text in groups.items():
        for line in text.strip().splitlines():
            name, _, arguments = line.partition(" ")
            listed.append(row_of(f"numpy.{name}", route, arguments))
    refused: Literal["refused"] = "refused"
    for reason, names in _REFUSED.items():
        listed += [row_of(name, refused, "", reason) for name in names]
    rows = {row.name: row for row in listed}
    if len(rows) != len(listed):
        raise ValueError("a function stands in two rows")
    return rows


ROWS: dict[str, Row] = _rows()
