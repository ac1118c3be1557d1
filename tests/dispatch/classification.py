"""A second statement of the routes, independent of the tables that the machinery computes by."""

from __future__ import annotations

__all__ = ["EXACT", "NOT_OF_THE_STATE", "REFUSED", "ROUNDED", "ROUTE_OF"]

# elementary ufuncs
EXACT = """
absolute ceil copysign equal fabs floor fmax fmin fmod greater greater_equal isfinite isinf isnan less less_equal
logical_and logical_not logical_or logical_xor maximum minimum negative not_equal positive rint sign signbit trunc
"""

ROUNDED = """
add arccos arccosh arcsin arcsinh arctan arctan2 arctanh cbrt cos cosh deg2rad degrees divide exp exp2 expm1
float_power floor_divide heaviside hypot log log10 log1p log2 logaddexp logaddexp2 multiply power rad2deg radians
reciprocal remainder sin sinh sqrt square subtract tan tanh
"""

# ufuncs of dates, text and of NumPy itself
NOT_OF_THE_STATE = """
_center _expandtabs _expandtabs_length _ljust _lstrip_chars _lstrip_whitespace _ones_like _partition _partition_index
_replace _rjust _rpartition _rpartition_index _rstrip_chars _rstrip_whitespace _slice _strip_chars _strip_whitespace
_zfill count endswith find index isalnum isalpha isdecimal isdigit islower isnat isnumeric isspace istitle isupper
rfind rindex startswith str_len
"""

# the other functions, without `numpy.`
_EXACT = """
all amax amin any append argmax argmin argpartition argsort argwhere array2string array_equal array_equiv array_repr
array_split array_str astype atleast_1d atleast_2d atleast_3d block broadcast_arrays broadcast_to can_cast choose clip
column_stack common_type compress concatenate copy copyto count_nonzero delete diag diag_indices_from diagflat
diagonal digitize dsplit dstack einsum_path empty_like expand_dims extract fft.fftshift fft.ifftshift fill_diagonal
fix flatnonzero flip fliplr flipud full_like hsplit hstack imag insert intersect1d iscomplex iscomplexobj isin
isneginf isposinf isreal isrealobj ix_ lexsort lib.stride_tricks.sliding_window_view linalg.diagonal
linalg.matrix_transpose matrix_transpose max may_share_memory meshgrid min moveaxis nan_to_num nanargmax nanargmin
nanmax nanmin ndim nonzero ones_like packbits pad partition place put put_along_axis putmask ravel ravel_multi_index
real real_if_close repeat reshape resize result_type roll rollaxis rot90 searchsorted select setdiff1d setxor1d shape
shares_memory size sort split squeeze stack swapaxes take take_along_axis tile transpose tril tril_indices_from
trim_zeros triu triu_indices_from union1d unique unique_all unique_counts unique_inverse unique_values unpackbits
unravel_index unstack vsplit vstack where zeros_like
"""

_ROUNDED = """
around diff ediff1d i0 kron linalg.outer outer ptp round sinc
"""

_ACCUMULATED = """
average convolve correlate cumprod cumsum cumulative_prod cumulative_sum dot einsum inner linalg.cholesky
linalg.matmul linalg.solve linalg.tensordot linalg.trace linalg.vecdot mean nancumprod nancumsum nanprod nansum prod
std sum tensordot trace trapezoid var vdot
"""

_WHOLE = """
allclose angle bincount corrcoef cov cross fft.hfft fft.irfft fft.irfft2 fft.irfftn geomspace gradient histogram
histogram2d histogram_bin_edges histogramdd interp isclose lib.scimath.arccos lib.scimath.arcsin lib.scimath.arctanh
lib.scimath.log lib.scimath.log10 lib.scimath.log2 lib.scimath.logn lib.scimath.power lib.scimath.sqrt linalg.cond
linalg.cross linalg.det linalg.eig linalg.eigh linalg.eigvals linalg.eigvalsh linalg.inv linalg.lstsq
linalg.matrix_norm linalg.matrix_power linalg.matrix_rank linalg.multi_dot linalg.norm linalg.pinv linalg.qr
linalg.slogdet linalg.svd linalg.svdvals linalg.tensorinv linalg.tensorsolve linalg.vector_norm linspace logspace
median nanmean nanmedian nanpercentile nanquantile nanstd nanvar percentile poly polyadd polyder polydiv polyfit
polyint polymul polynomial.polynomial.polygrid2d polynomial.polynomial.polyval2d polysub polyval quantile roots unwrap
vander
"""

_REFUSED = """
apply_along_axis apply_over_axes arange array asanyarray asarray ascontiguousarray asfortranarray busday_count
busday_offset char.equal char.greater char.greater_equal char.less char.less_equal char.not_equal datetime_as_string
empty eye fft.fft fft.fft2 fft.fftn fft.ifft fft.ifft2 fft.ifftn fft.ihfft fft.rfft fft.rfft2 fft.rfftn frombuffer
fromfile fromfunction fromiter fromstring full genfromtxt identity is_busday lib.recfunctions.append_fields
lib.recfunctions.apply_along_fields lib.recfunctions.assign_fields_by_name lib.recfunctions.drop_fields
lib.recfunctions.find_duplicates lib.recfunctions.join_by lib.recfunctions.merge_arrays
lib.recfunctions.rec_append_fields lib.recfunctions.rec_drop_fields lib.recfunctions.rec_join
lib.recfunctions.recursive_fill_fields lib.recfunctions.rename_fields lib.recfunctions.repack_fields
lib.recfunctions.require_fields lib.recfunctions.stack_arrays lib.recfunctions.structured_to_unstructured
lib.recfunctions.unstructured_to_structured loadtxt min_scalar_type ones piecewise require save savetxt savez
savez_compressed sort_complex strings._join strings._rsplit strings._split strings._splitlines strings.capitalize
strings.center strings.decode strings.encode strings.expandtabs strings.ljust strings.lower strings.mod
strings.multiply strings.partition strings.replace strings.rjust strings.rpartition strings.swapcase strings.title
strings.translate strings.upper strings.zfill tri zeros
"""

REFUSED = _REFUSED.split()
ROUTE_OF = {
    name: route
    for route, names in (
        ("exact", _EXACT),
        ("rounded", _ROUNDED),
        ("accumulated", _ACCUMULATED),
        ("whole", _WHOLE),
        ("refused", _REFUSED),
    )
    for name in names.split()
}
