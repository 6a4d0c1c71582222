//! The eight dense routines that the semidefinite cone of the solver is linked to, on pure Rust linear algebra.
//!
//! The solver calls Fortran BLAS and LAPACK by their C names. Providing just those names here keeps the build free of
//! system packages and of a Fortran compiler, and makes results repeatable bit by bit on one machine: every routine
//! runs on one thread and in a fixed order.
//!
//! Matrices are column-major with a leading dimension, `M_rc = m[r + c · ld]`. Only what the solver reaches is
//! implemented; anything else is refused through `info` (minus the number of the offending argument, as LAPACK does).
//! The three BLAS products have no `info`; arguments that cannot be right leave their output untouched.
//! No routine lets a panic cross the C boundary: a failure inside becomes `info > 0`, or NaN in the output of a product.
//!
//! # Safety
//!
//! Each function trusts its caller as its Fortran namesake does: every scalar pointer is valid, every matrix pointer
//! covers `ld · (columns − 1) + rows` numbers, and outputs do not overlap with inputs. Dimensions and leading
//! dimensions are checked against each other before any matrix is touched.
#![allow(unsafe_code, clippy::too_many_arguments)]

use std::ffi::{c_char, c_int};
use std::hint::black_box;
use std::panic::{AssertUnwindSafe, catch_unwind};

use faer::dyn_stack::{MemBuffer, MemStack};
use faer::linalg::cholesky::llt;
use faer::linalg::evd::{self, ComputeEigenvectors};
use faer::linalg::matmul::{matmul, triangular, triangular::BlockStructure};
use faer::linalg::svd::{self, ComputeSvdVectors};
use faer::{Accum, ColMut, Mat, MatMut, MatRef, Par};

/// `info` of a decomposition that did not converge.
const NO_CONVERGENCE: c_int = 1;

/// Refers to every routine, so that a linker that has not yet met their callers keeps them.
pub fn keep_linked() {
    black_box(dgemm_ as *const ());
    black_box(dsyrk_ as *const ());
    black_box(dsyr2k_ as *const ());
    black_box(dpotrf_ as *const ());
    black_box(dpotrs_ as *const ());
    black_box(dsyevr_ as *const ());
    black_box(dgesdd_ as *const ());
    black_box(dgesvd_ as *const ());
}

/// A dimension, `None` if negative.
unsafe fn size(pointer: *const c_int) -> Option<usize> {
    usize::try_from(unsafe { *pointer }).ok()
}

/// A leading dimension, `None` if a column of `rows` entries does not fit.
unsafe fn leading(pointer: *const c_int, rows: usize) -> Option<isize> {
    let value = unsafe { *pointer };
    if value >= 1 && usize::try_from(value).is_ok_and(|value| value >= rows) { isize::try_from(value).ok() } else { None }
}

/// A mode letter in upper case.
unsafe fn letter(pointer: *const c_char) -> u8 {
    (unsafe { *pointer } as u8).to_ascii_uppercase()
}

/// Whether a product takes its factor transposed; `None` for an unknown letter. Conjugation does nothing to reals.
unsafe fn transposed(pointer: *const c_char) -> Option<bool> {
    match unsafe { letter(pointer) } {
        b'N' => Some(false),
        b'T' | b'C' => Some(true),
        _ => None,
    }
}

/// Whether the lower triangle is meant; `None` for an unknown letter.
unsafe fn lower(pointer: *const c_char) -> Option<bool> {
    match unsafe { letter(pointer) } {
        b'L' => Some(true),
        b'U' => Some(false),
        _ => None,
    }
}

unsafe fn read<'a>(data: *const f64, rows: usize, columns: usize, leading: isize) -> MatRef<'a, f64> {
    unsafe { MatRef::from_raw_parts(data, rows, columns, 1, leading) }
}

unsafe fn write<'a>(data: *mut f64, rows: usize, columns: usize, leading: isize) -> MatMut<'a, f64> {
    unsafe { MatMut::from_raw_parts_mut(data, rows, columns, 1, leading) }
}

/// `op(M)` of shape `rows × columns`, where `M` itself is stored transposed if so asked. `None` if it does not fit.
unsafe fn operand<'a>(data: *const f64, ld: *const c_int, rows: usize, columns: usize, transposed: bool) -> Option<MatRef<'a, f64>> {
    unsafe {
        if transposed {
            Some(read(data, columns, rows, leading(ld, columns)?).transpose())
        } else {
            Some(read(data, rows, columns, leading(ld, rows)?))
        }
    }
}

/// `C ← β C` on the entries that `within(row, column)` names. As in BLAS, `β = 0` overwrites without reading, so that
/// NaN in uninitialised output does not survive.
fn scale(c: &mut MatMut<'_, f64>, beta: f64, within: impl Fn(usize, usize) -> bool) {
    if beta == 1.0 {
        return;
    }
    for column in 0..c.ncols() {
        for row in 0..c.nrows() {
            if within(row, column) {
                c[(row, column)] = if beta == 0.0 { 0.0 } else { beta * c[(row, column)] };
            }
        }
    }
}

/// Runs a product; should it panic, its output becomes NaN, which the solver notices, rather than stay plausible.
fn product(mut c: MatMut<'_, f64>, body: impl FnOnce(&mut MatMut<'_, f64>)) {
    if catch_unwind(AssertUnwindSafe(|| body(&mut c))).is_err() {
        c.fill(f64::NAN);
    }
}

/// Runs a decomposition and turns a panic into its `info`.
fn decomposition(body: impl FnOnce() -> c_int) -> c_int {
    catch_unwind(AssertUnwindSafe(body)).unwrap_or(NO_CONVERGENCE)
}

/// `C ← α op(A) op(B) + β C`, with `op(A)` of shape `m × k`, `op(B)` of shape `k × n` and `C` of shape `m × n`.
#[unsafe(no_mangle)]
pub unsafe extern "C" fn dgemm_(
    transa: *const c_char,
    transb: *const c_char,
    m: *const c_int,
    n: *const c_int,
    k: *const c_int,
    alpha: *const f64,
    a: *const f64,
    lda: *const c_int,
    b: *const f64,
    ldb: *const c_int,
    beta: *const f64,
    c: *mut f64,
    ldc: *const c_int,
) {
    let checked = || unsafe {
        let (m, n, k) = (size(m)?, size(n)?, size(k)?);
        let a = operand(a, lda, m, k, transposed(transa)?)?;
        let b = operand(b, ldb, k, n, transposed(transb)?)?;
        Some((a, b, write(c, m, n, leading(ldc, m)?)))
    };
    let Some((a, b, c)) = checked() else { return };
    let (alpha, beta) = unsafe { (*alpha, *beta) };
    product(c, |c| {
        scale(c, beta, |_, _| true);
        if alpha != 0.0 {
            matmul(c.as_mut(), Accum::Add, a, b, alpha, Par::Seq);
        }
    });
}

/// `C ← α op(A) op(A)ᵀ + β C` on one triangle of `C`, with `op(A)` of shape `n × k` and `C` of shape `n × n`.
#[unsafe(no_mangle)]
pub unsafe extern "C" fn dsyrk_(
    uplo: *const c_char,
    trans: *const c_char,
    n: *const c_int,
    k: *const c_int,
    alpha: *const f64,
    a: *const f64,
    lda: *const c_int,
    beta: *const f64,
    c: *mut f64,
    ldc: *const c_int,
) {
    let checked = || unsafe {
        let (n, k) = (size(n)?, size(k)?);
        let a = operand(a, lda, n, k, transposed(trans)?)?;
        Some((lower(uplo)?, a, write(c, n, n, leading(ldc, n)?)))
    };
    let Some((lower, a, c)) = checked() else { return };
    let (alpha, beta) = unsafe { (*alpha, *beta) };
    product(c, |c| {
        scale(c, beta, |row, column| if lower { row >= column } else { row <= column });
        add_to_triangle(c, lower, a, a, alpha);
    });
}

/// `C ← α (op(A) op(B)ᵀ + op(B) op(A)ᵀ) + β C` on one triangle of `C`, shapes as in [`dsyrk_`].
#[unsafe(no_mangle)]
pub unsafe extern "C" fn dsyr2k_(
    uplo: *const c_char,
    trans: *const c_char,
    n: *const c_int,
    k: *const c_int,
    alpha: *const f64,
    a: *const f64,
    lda: *const c_int,
    b: *const f64,
    ldb: *const c_int,
    beta: *const f64,
    c: *mut f64,
    ldc: *const c_int,
) {
    let checked = || unsafe {
        let (n, k, transposed) = (size(n)?, size(k)?, transposed(trans)?);
        let a = operand(a, lda, n, k, transposed)?;
        let b = operand(b, ldb, n, k, transposed)?;
        Some((lower(uplo)?, a, b, write(c, n, n, leading(ldc, n)?)))
    };
    let Some((lower, a, b, c)) = checked() else { return };
    let (alpha, beta) = unsafe { (*alpha, *beta) };
    product(c, |c| {
        scale(c, beta, |row, column| if lower { row >= column } else { row <= column });
        add_to_triangle(c, lower, a, b, alpha);
        add_to_triangle(c, lower, b, a, alpha);
    });
}

/// `C ← C + α A Bᵀ` on one triangle of `C`.
fn add_to_triangle(c: &mut MatMut<'_, f64>, lower: bool, a: MatRef<'_, f64>, b: MatRef<'_, f64>, alpha: f64) {
    if alpha == 0.0 {
        return;
    }
    let triangle = if lower { BlockStructure::TriangularLower } else { BlockStructure::TriangularUpper };
    let whole = BlockStructure::Rectangular;
    triangular::matmul(c.as_mut(), triangle, Accum::Add, a, whole, b.transpose(), whole, alpha, Par::Seq);
}

/// Cholesky factor in place: `A = L Lᵀ` (`uplo = L`) or `A = Uᵀ U` (`uplo = U`); the other triangle is left alone.
/// `info = i` if the leading minor of order `i` is not positive definite.
#[unsafe(no_mangle)]
pub unsafe extern "C" fn dpotrf_(uplo: *const c_char, n: *const c_int, a: *mut f64, lda: *const c_int, info: *mut c_int) {
    unsafe { *info = potrf(uplo, n, a, lda) };
}

unsafe fn potrf(uplo: *const c_char, n: *const c_int, a: *mut f64, lda: *const c_int) -> c_int {
    let Some(lower) = (unsafe { lower(uplo) }) else { return -1 };
    let Some(n) = (unsafe { size(n) }) else { return -2 };
    let Some(lda) = (unsafe { leading(lda, n) }) else { return -4 };
    // The upper factor is the transpose of the lower one, and so is its storage.
    let a = unsafe { write(a, n, n, lda) };
    let mut a = if lower { a } else { a.transpose_mut() };
    decomposition(|| {
        // The factorisation scribbles on the other triangle, which the caller multiplies by as zeros: work on a copy.
        let mut factor = Mat::<f64>::zeros(n, n);
        factor.copy_from_triangular_lower(a.as_ref());
        let mut memory = MemBuffer::new(llt::factor::cholesky_in_place_scratch::<f64>(n, Par::Seq, Default::default()));
        let stack = MemStack::new(&mut memory);
        if let Err(error) = llt::factor::cholesky_in_place(factor.as_mut(), Default::default(), Par::Seq, stack, Default::default()) {
            let llt::factor::LltError::NonPositivePivot { index } = error;
            return order(index);
        }
        // A NaN may pass every comparison on the way; it must not leave as a factor.
        if let Some(index) = (0..n).find(|&i| !(factor[(i, i)] > 0.0 && factor[(i, i)].is_finite())) {
            return order(index);
        }
        a.copy_from_triangular_lower(factor.as_ref());
        0
    })
}

/// The one-based order of the minor that ends at a zero-based index.
fn order(index: usize) -> c_int {
    c_int::try_from(index + 1).unwrap_or(c_int::MAX)
}

/// Solves `A X = B` in place of `B`, of shape `n × nrhs`, given the factor that [`dpotrf_`] left in `A`.
#[unsafe(no_mangle)]
pub unsafe extern "C" fn dpotrs_(
    uplo: *const c_char,
    n: *const c_int,
    nrhs: *const c_int,
    a: *const f64,
    lda: *const c_int,
    b: *mut f64,
    ldb: *const c_int,
    info: *mut c_int,
) {
    unsafe { *info = potrs(uplo, n, nrhs, a, lda, b, ldb) };
}

unsafe fn potrs(
    uplo: *const c_char,
    n: *const c_int,
    nrhs: *const c_int,
    a: *const f64,
    lda: *const c_int,
    b: *mut f64,
    ldb: *const c_int,
) -> c_int {
    let Some(lower) = (unsafe { lower(uplo) }) else { return -1 };
    let Some(n) = (unsafe { size(n) }) else { return -2 };
    let Some(nrhs) = (unsafe { size(nrhs) }) else { return -3 };
    let Some(lda) = (unsafe { leading(lda, n) }) else { return -5 };
    let Some(ldb) = (unsafe { leading(ldb, n) }) else { return -7 };
    let (a, b) = unsafe { (read(a, n, n, lda), write(b, n, nrhs, ldb)) };
    let factor = if lower { a } else { a.transpose() };
    decomposition(|| {
        let mut memory = MemBuffer::new(llt::solve::solve_in_place_scratch::<f64>(n, nrhs, Par::Seq));
        llt::solve::solve_in_place(factor, b, Par::Seq, MemStack::new(&mut memory));
        0
    })
}

/// All eigenvalues of a symmetric matrix in ascending order (`jobz = N`, `range = A` only). One triangle of `A` is
/// read. A call with `lwork = −1` or `liwork = −1` asks for workspace: none is needed, so it gets the least, one.
#[unsafe(no_mangle)]
pub unsafe extern "C" fn dsyevr_(
    jobz: *const c_char,
    range: *const c_char,
    uplo: *const c_char,
    n: *const c_int,
    a: *mut f64,
    lda: *const c_int,
    _vl: *const f64,
    _vu: *const f64,
    _il: *const c_int,
    _iu: *const c_int,
    _abstol: *const f64,
    m: *mut c_int,
    w: *mut f64,
    _z: *mut f64,
    _ldz: *const c_int,
    _isuppz: *mut c_int,
    work: *mut f64,
    lwork: *const c_int,
    iwork: *mut c_int,
    liwork: *const c_int,
    info: *mut c_int,
) {
    unsafe {
        if *lwork == -1 || *liwork == -1 {
            *work = 1.0;
            *iwork = 1;
            *info = 0;
            return;
        }
        *info = syevr(jobz, range, uplo, n, a, lda, w);
        *m = if *info == 0 { *n } else { 0 };
    }
}

unsafe fn syevr(
    jobz: *const c_char,
    range: *const c_char,
    uplo: *const c_char,
    n: *const c_int,
    a: *const f64,
    lda: *const c_int,
    w: *mut f64,
) -> c_int {
    if unsafe { letter(jobz) } != b'N' {
        return -1;
    }
    if unsafe { letter(range) } != b'A' {
        return -2;
    }
    let Some(lower) = (unsafe { lower(uplo) }) else { return -3 };
    let Some(n) = (unsafe { size(n) }) else { return -4 };
    let Some(lda) = (unsafe { leading(lda, n) }) else { return -6 };
    let a = unsafe { read(a, n, n, lda) };
    // The decomposition reads the lower triangle.
    let a = if lower { a } else { a.transpose() };
    decomposition(|| {
        // The QR iteration is not meant for NaN.
        if !triangle_is_finite(a) {
            return NO_CONVERGENCE;
        }
        let none = ComputeEigenvectors::No;
        let mut memory = MemBuffer::new(evd::self_adjoint_evd_scratch::<f64>(n, none, Par::Seq, Default::default()));
        let values = unsafe { std::slice::from_raw_parts_mut(w, n) };
        let diagonal = ColMut::from_slice_mut(values).as_diagonal_mut();
        match evd::self_adjoint_evd(a, diagonal, None, Par::Seq, MemStack::new(&mut memory), Default::default()) {
            Ok(()) => {
                values.sort_unstable_by(f64::total_cmp);
                0
            }
            Err(evd::EvdError::NoConvergence) => NO_CONVERGENCE,
        }
    })
}

fn triangle_is_finite(a: MatRef<'_, f64>) -> bool {
    (0..a.ncols()).all(|column| (column..a.nrows()).all(|row| a[(row, column)].is_finite()))
}

/// Thin singular value decomposition `A = U diag(s) Vᵀ` (`jobz = S` only), singular values in descending order. With
/// `k = min(m, n)`: `A` is `m × n`, `s` has `k` entries, `U` is `m × k`, `Vᵀ` is `k × n`. A call with `lwork = −1`
/// asks for workspace: none is needed, so it gets the least, one.
#[unsafe(no_mangle)]
pub unsafe extern "C" fn dgesdd_(
    jobz: *const c_char,
    m: *const c_int,
    n: *const c_int,
    a: *mut f64,
    lda: *const c_int,
    s: *mut f64,
    u: *mut f64,
    ldu: *const c_int,
    vt: *mut f64,
    ldvt: *const c_int,
    work: *mut f64,
    lwork: *const c_int,
    _iwork: *mut c_int,
    info: *mut c_int,
) {
    unsafe {
        if *lwork == -1 {
            *work = 1.0;
            *info = 0;
            return;
        }
        *info = if letter(jobz) == b'S' { thin_svd(m, n, a, lda, s, u, ldu, vt, ldvt, 2) } else { -1 };
    }
}

/// The same decomposition as [`dgesdd_`] under the name of another algorithm (`jobu = jobvt = S` only).
#[unsafe(no_mangle)]
pub unsafe extern "C" fn dgesvd_(
    jobu: *const c_char,
    jobvt: *const c_char,
    m: *const c_int,
    n: *const c_int,
    a: *mut f64,
    lda: *const c_int,
    s: *mut f64,
    u: *mut f64,
    ldu: *const c_int,
    vt: *mut f64,
    ldvt: *const c_int,
    work: *mut f64,
    lwork: *const c_int,
    info: *mut c_int,
) {
    unsafe {
        if *lwork == -1 {
            *work = 1.0;
            *info = 0;
            return;
        }
        *info = if letter(jobu) != b'S' {
            -1
        } else if letter(jobvt) != b'S' {
            -2
        } else {
            thin_svd(m, n, a, lda, s, u, ldu, vt, ldvt, 3)
        };
    }
}

/// `first` is the number of the argument `m` in the caller's list, from which the numbers of the others follow.
unsafe fn thin_svd(
    m: *const c_int,
    n: *const c_int,
    a: *const f64,
    lda: *const c_int,
    s: *mut f64,
    u: *mut f64,
    ldu: *const c_int,
    vt: *mut f64,
    ldvt: *const c_int,
    first: c_int,
) -> c_int {
    let Some(m) = (unsafe { size(m) }) else { return -first };
    let Some(n) = (unsafe { size(n) }) else { return -first - 1 };
    let k = m.min(n);
    let Some(lda) = (unsafe { leading(lda, m) }) else { return -first - 3 };
    let Some(ldu) = (unsafe { leading(ldu, m) }) else { return -first - 6 };
    let Some(ldvt) = (unsafe { leading(ldvt, k) }) else { return -first - 8 };
    let (a, u, vt) = unsafe { (read(a, m, n, lda), write(u, m, k, ldu), write(vt, k, n, ldvt)) };
    decomposition(|| {
        if !(0..n).all(|column| (0..m).all(|row| a[(row, column)].is_finite())) {
            return NO_CONVERGENCE;
        }
        let thin = ComputeSvdVectors::Thin;
        let mut memory = MemBuffer::new(svd::svd_scratch::<f64>(m, n, thin, thin, Par::Seq, Default::default()));
        let values = ColMut::from_slice_mut(unsafe { std::slice::from_raw_parts_mut(s, k) }).as_diagonal_mut();
        let v = Some(vt.transpose_mut());
        match svd::svd(a, values, Some(u), v, Par::Seq, MemStack::new(&mut memory), Default::default()) {
            Ok(()) => 0,
            Err(svd::SvdError::NoConvergence) => NO_CONVERGENCE,
        }
    })
}

#[cfg(test)]
mod tests {
    use std::ptr::null_mut;

    use super::*;
    use crate::solver::pseudorandom::Numbers;

    /// Marks what a routine must not touch.
    const GUARD: f64 = 7.25;

    /// A column-major matrix with a leading dimension, as the routines see it.
    #[derive(Clone)]
    struct Stored {
        data: Vec<f64>,
        rows: usize,
        columns: usize,
        ld: usize,
    }

    impl Stored {
        fn new(rows: usize, columns: usize, gap: usize, mut entry: impl FnMut(usize, usize) -> f64) -> Self {
            let ld = (rows + gap).max(1);
            let mut data = vec![GUARD; ld * columns];
            for column in 0..columns {
                for row in 0..rows {
                    data[row + column * ld] = entry(row, column);
                }
            }
            Self { data, rows, columns, ld }
        }

        fn random(rows: usize, columns: usize, gap: usize, numbers: &mut Numbers) -> Self {
            Self::new(rows, columns, gap, |_, _| numbers.symmetric())
        }

        fn at(&self, row: usize, column: usize) -> f64 {
            assert!(row < self.rows && column < self.columns);
            self.data[row + column * self.ld]
        }

        /// `op(M)` at a place.
        fn op(&self, transposed: bool, row: usize, column: usize) -> f64 {
            if transposed { self.at(column, row) } else { self.at(row, column) }
        }

        fn ld(&self) -> c_int {
            int(self.ld)
        }

        /// Nothing below the last row of any column was written.
        fn assert_gap_untouched(&self) {
            for column in 0..self.columns {
                assert!(self.data[column * self.ld + self.rows..(column + 1) * self.ld].iter().all(|&number| number == GUARD));
            }
        }
    }

    fn int(value: usize) -> c_int {
        c_int::try_from(value).unwrap()
    }

    fn char(letter: u8) -> c_char {
        letter as c_char
    }

    fn assert_close(left: f64, right: f64, tolerance: f64) {
        assert!((left - right).abs() <= tolerance, "{left} and {right} differ by {:e}", left - right);
    }

    const MODES: [(u8, bool); 3] = [(b'N', false), (b'T', true), (b't', true)];
    const TRIANGLES: [u8; 2] = [b'U', b'L'];
    const SCALARS: [(f64, f64); 5] = [(1.0, 0.0), (0.5, 0.0), (-1.5, 1.0), (2.0, -0.5), (0.0, 3.0)];

    #[test]
    fn general_product() {
        let mut numbers = Numbers::new(1);
        for (m, n, k) in [(1, 1, 1), (4, 4, 4), (5, 3, 7), (20, 20, 20), (25, 25, 25), (33, 17, 40), (70, 65, 66), (3, 2, 0), (0, 3, 2)] {
            for (transa, ta) in MODES {
                for (transb, tb) in MODES {
                    for (alpha, beta) in SCALARS {
                        for gap in [0, 3] {
                            let a = if ta { (k, m) } else { (m, k) };
                            let b = if tb { (n, k) } else { (k, n) };
                            let a = Stored::random(a.0, a.1, gap, &mut numbers);
                            let b = Stored::random(b.0, b.1, gap, &mut numbers);
                            let before = Stored::random(m, n, gap, &mut numbers);
                            let mut c = before.clone();
                            unsafe {
                                dgemm_(
                                    &char(transa),
                                    &char(transb),
                                    &int(m),
                                    &int(n),
                                    &int(k),
                                    &alpha,
                                    a.data.as_ptr(),
                                    &a.ld(),
                                    b.data.as_ptr(),
                                    &b.ld(),
                                    &beta,
                                    c.data.as_mut_ptr(),
                                    &c.ld(),
                                );
                            }
                            c.assert_gap_untouched();
                            for row in 0..m {
                                for column in 0..n {
                                    let sum: f64 = (0..k).map(|i| a.op(ta, row, i) * b.op(tb, i, column)).sum();
                                    assert_close(c.at(row, column), alpha * sum + beta * before.at(row, column), 1e-13);
                                }
                            }
                        }
                    }
                }
            }
        }
    }

    #[test]
    fn a_zero_factor_overwrites_whatever_was_there() {
        let a = Stored::new(4, 4, 0, |_, _| 1.0);
        let mut c = Stored::new(4, 4, 0, |_, _| f64::NAN);
        let (n, four) = (char(b'N'), int(4));
        unsafe {
            dgemm_(&n, &n, &four, &four, &four, &1.0, a.data.as_ptr(), &four, a.data.as_ptr(), &four, &0.0, c.data.as_mut_ptr(), &four);
        }
        assert!(c.data.iter().all(|&number| number == 4.0));
    }

    #[test]
    fn impossible_arguments_leave_a_product_alone() {
        let a = Stored::new(4, 4, 0, |_, _| 1.0);
        let mut c = Stored::new(4, 4, 0, |_, _| 2.0);
        let four = int(4);
        for (trans, m, ld) in [(b'X', 4, 4), (b'N', -1, 4), (b'N', 4, 3)] {
            unsafe {
                let trans = char(trans);
                dgemm_(&trans, &trans, &m, &four, &four, &1.0, a.data.as_ptr(), &ld, a.data.as_ptr(), &ld, &0.0, c.data.as_mut_ptr(), &ld);
            }
        }
        assert!(c.data.iter().all(|&number| number == 2.0));
    }

    /// Runs one of the symmetric updates in every mode, and compares with `α · term(i) summed over i + β C`.
    fn symmetric_updates(twofold: bool) {
        let mut numbers = Numbers::new(2);
        for (n, k) in [(1, 1), (4, 4), (5, 3), (3, 8), (20, 20), (25, 25), (40, 37), (66, 70), (3, 0)] {
            for (trans, t) in MODES {
                for uplo in TRIANGLES {
                    for (alpha, beta) in SCALARS {
                        for gap in [0, 2] {
                            let (rows, columns) = if t { (k, n) } else { (n, k) };
                            let a = Stored::random(rows, columns, gap, &mut numbers);
                            let b = Stored::random(rows, columns, gap, &mut numbers);
                            let before = Stored::random(n, n, gap, &mut numbers);
                            let mut c = before.clone();
                            let (uplo, trans, a_data, b_data) = (char(uplo), char(trans), a.data.as_ptr(), b.data.as_ptr());
                            let (nn, kk, lda, ldb, ldc, out) = (int(n), int(k), a.ld(), b.ld(), c.ld(), c.data.as_mut_ptr());
                            unsafe {
                                if twofold {
                                    dsyr2k_(&uplo, &trans, &nn, &kk, &alpha, a_data, &lda, b_data, &ldb, &beta, out, &ldc);
                                } else {
                                    dsyrk_(&uplo, &trans, &nn, &kk, &alpha, a_data, &lda, &beta, out, &ldc);
                                }
                            }
                            c.assert_gap_untouched();
                            for row in 0..n {
                                for column in 0..n {
                                    let inside = if uplo == char(b'L') { row >= column } else { row <= column };
                                    if !inside {
                                        assert_eq!(c.at(row, column), before.at(row, column));
                                        continue;
                                    }
                                    let sum: f64 = (0..k)
                                        .map(|i| match twofold {
                                            false => a.op(t, row, i) * a.op(t, column, i),
                                            true => a.op(t, row, i) * b.op(t, column, i) + b.op(t, row, i) * a.op(t, column, i),
                                        })
                                        .sum();
                                    assert_close(c.at(row, column), alpha * sum + beta * before.at(row, column), 1e-13);
                                }
                            }
                        }
                    }
                }
            }
        }
    }

    #[test]
    fn symmetric_update() {
        symmetric_updates(false);
    }

    #[test]
    fn twofold_symmetric_update() {
        symmetric_updates(true);
    }

    /// `M Mᵀ + shift · I` for a random square `M`.
    fn gram(n: usize, shift: f64, numbers: &mut Numbers) -> Stored {
        let m = Stored::random(n, n, 0, numbers);
        Stored::new(n, n, 0, |row, column| {
            let sum: f64 = (0..n).map(|i| m.at(row, i) * m.at(column, i)).sum();
            sum + if row == column { shift } else { 0.0 }
        })
    }

    /// Keeps one triangle, the diagonal included, and fills the other with the guard.
    fn triangle(full: &Stored, uplo: u8, gap: usize) -> Stored {
        Stored::new(full.rows, full.columns, gap, |row, column| {
            let inside = if uplo == b'L' { row >= column } else { row <= column };
            if inside { full.at(row, column) } else { GUARD }
        })
    }

    #[test]
    fn cholesky_factor_and_solution() {
        let mut numbers = Numbers::new(3);
        for n in [1, 2, 4, 5, 16, 20, 25, 40, 65, 100] {
            for uplo in TRIANGLES {
                for gap in [0, 5] {
                    let full = gram(n, 1.0, &mut numbers);
                    let mut a = triangle(&full, uplo, gap);
                    let mut info = -77;
                    unsafe { dpotrf_(&char(uplo), &int(n), a.data.as_mut_ptr(), &a.ld(), &mut info) };
                    assert_eq!(info, 0);
                    a.assert_gap_untouched();
                    // The lower factor, whichever way it is stored.
                    let factor = |row: usize, column: usize| {
                        if row < column { 0.0 } else { a.op(uplo == b'U', row, column) }
                    };
                    for row in 0..n {
                        for column in 0..n {
                            let sum: f64 = (0..n).map(|i| factor(row, i) * factor(column, i)).sum();
                            assert_close(sum, full.at(row, column), 1e-13);
                            if row < column {
                                assert_eq!(a.op(uplo == b'U', row, column), GUARD, "the other triangle was written");
                            }
                        }
                    }
                    for nrhs in [0, 1, 3, n] {
                        let x = Stored::random(n, nrhs, gap, &mut numbers);
                        let mut b = Stored::new(n, nrhs, gap, |row, column| (0..n).map(|i| full.at(row, i) * x.at(i, column)).sum());
                        let mut info = -77;
                        let (data, solution, ldb) = (a.data.as_ptr(), b.data.as_mut_ptr(), b.ld());
                        unsafe { dpotrs_(&char(uplo), &int(n), &int(nrhs), data, &a.ld(), solution, &ldb, &mut info) };
                        assert_eq!(info, 0);
                        b.assert_gap_untouched();
                        for row in 0..n {
                            for column in 0..nrhs {
                                assert_close(b.at(row, column), x.at(row, column), 1e-12);
                            }
                        }
                    }
                }
            }
        }
    }

    #[test]
    fn cholesky_names_the_first_minor_that_fails() {
        for (n, bad, value) in [(4, 0, -1.0), (5, 3, 0.0), (30, 29, -1e-3), (80, 70, -1.0), (6, 2, f64::NAN)] {
            for uplo in TRIANGLES {
                let mut a = Stored::new(n, n, 0, |row, column| {
                    if row != column {
                        0.0
                    } else if row == bad {
                        value
                    } else {
                        2.0
                    }
                });
                let mut info = -77;
                unsafe { dpotrf_(&char(uplo), &int(n), a.data.as_mut_ptr(), &a.ld(), &mut info) };
                assert_eq!(info, int(bad + 1), "n = {n}, value = {value}");
            }
        }
    }

    #[test]
    fn cholesky_refuses_arguments_by_number() {
        let mut a = [1.0];
        let mut info = 0;
        for (uplo, n, lda, expected) in [(b'X', 1, 1, -1), (b'L', -1, 1, -2), (b'L', 1, 0, -4)] {
            unsafe { dpotrf_(&char(uplo), &n, a.as_mut_ptr(), &lda, &mut info) };
            assert_eq!(info, expected);
        }
    }

    /// Calls [`dsyevr_`] as the solver does: once for the workspace, once for the eigenvalues.
    fn eigenvalues(a: &mut Stored, jobz: u8, range: u8, uplo: u8) -> (c_int, c_int, Vec<f64>) {
        let mut values = vec![GUARD; a.rows + 1];
        let (mut work, mut iwork, mut info, mut found) = (vec![0.0], vec![0], -77, -77);
        let (mut lwork, mut liwork) = (-1, -1);
        for _ in 0..2 {
            unsafe {
                dsyevr_(
                    &char(jobz),
                    &char(range),
                    &char(uplo),
                    &int(a.rows),
                    a.data.as_mut_ptr(),
                    &a.ld(),
                    &0.0,
                    &0.0,
                    &0,
                    &0,
                    &-1.0,
                    &mut found,
                    values.as_mut_ptr(),
                    null_mut(),
                    &a.ld(),
                    null_mut(),
                    work.as_mut_ptr(),
                    &lwork,
                    iwork.as_mut_ptr(),
                    &liwork,
                    &mut info,
                );
            }
            (lwork, liwork) = (work[0] as c_int, iwork[0]);
            assert!(lwork >= 1 && liwork >= 1);
        }
        assert_eq!(values.pop(), Some(GUARD));
        (info, found, values)
    }

    /// A random orthogonal matrix: a product of reflections `I − 2 h hᵀ / ⟨h, h⟩`.
    fn orthogonal(n: usize, numbers: &mut Numbers) -> Stored {
        let mut q = Stored::new(n, n, 0, |row, column| f64::from(u8::from(row == column)));
        for _ in 0..n {
            let h: Vec<f64> = (0..n).map(|_| numbers.symmetric()).collect();
            let norm: f64 = h.iter().map(|entry| entry * entry).sum();
            for column in 0..n {
                let inner: f64 = (0..n).map(|row| h[row] * q.at(row, column)).sum();
                for (entry, h) in q.data[column * n..].iter_mut().zip(&h) {
                    *entry -= 2.0 * h * inner / norm;
                }
            }
        }
        q
    }

    #[test]
    fn eigenvalues_of_known_spectra() {
        let mut numbers = Numbers::new(4);
        for n in [1, 2, 4, 5, 16, 20, 25, 40, 65, 100] {
            for uplo in TRIANGLES {
                for gap in [0, 4] {
                    for repeated in [false, true] {
                        let mut spectrum: Vec<f64> =
                            (0..n).map(|i| if repeated { [-1.0, 0.0, 2.0][i % 3] } else { numbers.symmetric() }).collect();
                        let q = orthogonal(n, &mut numbers);
                        let full = Stored::new(n, n, 0, |row, column| (0..n).map(|i| q.at(row, i) * spectrum[i] * q.at(column, i)).sum());
                        spectrum.sort_by(f64::total_cmp);
                        let (info, found, values) = eigenvalues(&mut triangle(&full, uplo, gap), b'N', b'A', uplo);
                        assert_eq!((info, found), (0, int(n)));
                        for (value, expected) in values.iter().zip(&spectrum) {
                            assert_close(*value, *expected, 2e-14 * n as f64);
                        }
                    }
                }
            }
        }
    }

    #[test]
    fn eigenvalues_refuse_what_they_do_not_do() {
        let mut a = Stored::new(4, 4, 0, |row, column| (row + column) as f64);
        assert_eq!(eigenvalues(&mut a, b'V', b'A', b'U').0, -1);
        assert_eq!(eigenvalues(&mut a, b'N', b'I', b'U').0, -2);
        assert_eq!(eigenvalues(&mut a, b'N', b'A', b'X').0, -3);
        a.data[5] = f64::NAN;
        assert_eq!(eigenvalues(&mut a, b'N', b'A', b'U').0, NO_CONVERGENCE);
    }

    struct Decomposition {
        info: c_int,
        s: Vec<f64>,
        u: Stored,
        vt: Stored,
    }

    /// Calls [`dgesdd_`] or [`dgesvd_`] as the solver does: once for the workspace, once for the decomposition.
    fn thin(a: &Stored, gap: usize, divide: bool, job: u8) -> Decomposition {
        let (m, n) = (a.rows, a.columns);
        let k = m.min(n);
        let mut a = a.clone();
        let mut result = Decomposition {
            info: -77,
            s: vec![GUARD; k + 1],
            u: Stored::new(m, k, gap, |_, _| f64::NAN),
            vt: Stored::new(k, n, gap, |_, _| f64::NAN),
        };
        let (mut work, mut iwork, mut lwork) = (vec![0.0], vec![0; 8 * k + 1], -1);
        let (ldu, ldvt) = (result.u.ld(), result.vt.ld());
        for _ in 0..2 {
            let (s, u, vt) = (result.s.as_mut_ptr(), result.u.data.as_mut_ptr(), result.vt.data.as_mut_ptr());
            let (mm, nn, lda, data, work) = (int(m), int(n), a.ld(), a.data.as_mut_ptr(), work.as_mut_ptr());
            let info = &mut result.info;
            unsafe {
                if divide {
                    let iwork = iwork.as_mut_ptr();
                    dgesdd_(&char(job), &mm, &nn, data, &lda, s, u, &ldu, vt, &ldvt, work, &lwork, iwork, info);
                } else {
                    dgesvd_(&char(job), &char(job), &mm, &nn, data, &lda, s, u, &ldu, vt, &ldvt, work, &lwork, info);
                }
                lwork = *work as c_int;
            }
            assert!(lwork >= 1);
        }
        assert_eq!(result.s.pop(), Some(GUARD));
        result.u.assert_gap_untouched();
        result.vt.assert_gap_untouched();
        result
    }

    #[test]
    fn singular_value_decomposition() {
        let mut numbers = Numbers::new(5);
        for (m, n) in
            [(1, 1), (4, 4), (5, 5), (16, 16), (20, 20), (25, 25), (40, 40), (65, 65), (100, 100), (7, 4), (4, 7), (60, 5), (5, 60)]
        {
            let k: usize = m.min(n);
            for divide in [true, false] {
                for gap in [0, 3] {
                    for rank in [k, k.div_ceil(2)] {
                        let (left, right) = (Stored::random(m, rank, 0, &mut numbers), Stored::random(rank, n, 0, &mut numbers));
                        let a = Stored::new(m, n, gap, |row, column| {
                            let sum: f64 = (0..rank).map(|i| left.at(row, i) * right.at(i, column)).sum();
                            sum / rank as f64
                        });
                        let Decomposition { info, s, u, vt } = thin(&a, gap, divide, b'S');
                        assert_eq!(info, 0);
                        assert!(s.is_sorted_by(|one, next| one >= next) && s[k - 1] >= 0.0);
                        for row in 0..m {
                            for column in 0..n {
                                let sum: f64 = (0..k).map(|i| u.at(row, i) * s[i] * vt.at(i, column)).sum();
                                assert_close(sum, a.at(row, column), 1e-13);
                            }
                        }
                        for one in 0..k {
                            for other in 0..k {
                                let expected = f64::from(u8::from(one == other));
                                let u: f64 = (0..m).map(|i| u.at(i, one) * u.at(i, other)).sum();
                                let v: f64 = (0..n).map(|i| vt.at(one, i) * vt.at(other, i)).sum();
                                assert_close(u, expected, 1e-13);
                                assert_close(v, expected, 1e-13);
                            }
                        }
                    }
                }
            }
        }
    }

    #[test]
    fn singular_values_refuse_what_they_do_not_do() {
        let mut a = Stored::new(4, 4, 0, |row, column| (row * column) as f64);
        for divide in [true, false] {
            assert_eq!(thin(&a, 0, divide, b'A').info, -1);
        }
        a.data[3] = f64::INFINITY;
        for divide in [true, false] {
            assert_eq!(thin(&a, 0, divide, b'S').info, NO_CONVERGENCE);
        }
    }
}
