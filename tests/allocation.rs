//! Kernels that run inside iterations must not allocate once they are warm.

use rankassay::linalg::cg::{self, CgWorkspace};
use rankassay::linalg::cholesky;
use rankassay::linalg::dense::{self, Accumulate};
use rankassay::linalg::eigen::SymmetricEigen;
use rankassay::linalg::lanczos::{DenseOperator, LanczosWorkspace, StepParams, step_bound};
use rankassay::linalg::project;
use rankassay::linalg::vector::fill_pseudo_random;
use rankassay::linalg::workspace::Workspace;
use rankassay::linalg::{Mat, packed};
use std::alloc::{GlobalAlloc, Layout, System};
use std::cell::Cell;

thread_local! {
    static COUNT: Cell<usize> = const { Cell::new(0) };
}

/// The system allocator, counting the calls of each thread.
struct Counting;

// SAFETY: every call is passed on unchanged to the system allocator.
unsafe impl GlobalAlloc for Counting {
    unsafe fn alloc(&self, layout: Layout) -> *mut u8 {
        COUNT.with(|c| c.set(c.get() + 1));
        unsafe { System.alloc(layout) }
    }

    unsafe fn dealloc(&self, pointer: *mut u8, layout: Layout) {
        unsafe { System.dealloc(pointer, layout) }
    }

    unsafe fn realloc(&self, pointer: *mut u8, layout: Layout, size: usize) -> *mut u8 {
        COUNT.with(|c| c.set(c.get() + 1));
        unsafe { System.realloc(pointer, layout, size) }
    }
}

#[global_allocator]
static ALLOCATOR: Counting = Counting;

fn allocations(work: impl FnOnce()) -> usize {
    let before = COUNT.with(Cell::get);
    work();
    COUNT.with(Cell::get) - before
}

fn positive_definite(n: usize) -> Mat<f64> {
    let mut entries = vec![0.0; n * n];
    fill_pseudo_random(n as u64, &mut entries);
    Mat::from_fn(n, n, |i, j| {
        let mean = 0.5 * (entries[i + n * j] + entries[j + n * i]);
        if i == j { n as f64 + mean } else { mean }
    })
}

/// Runs `work` twice to warm it up and asserts that the third run does not allocate.
#[track_caller]
fn assert_silent(name: &str, n: usize, mut work: impl FnMut()) {
    work();
    work();
    assert_eq!(allocations(&mut work), 0, "{name} allocates at order {n}");
}

#[test]
fn the_counter_counts() {
    assert!(allocations(|| drop(std::hint::black_box(vec![1.0; 10]))) > 0);
}

#[test]
fn dense_kernels_do_not_allocate_once_warm() {
    for n in [1, 2, 17, 50, 200, 300] {
        let a = positive_definite(n);
        let mut ws = Workspace::new();
        let mut eig = SymmetricEigen::new(n);
        let (mut out, mut l, mut side) = (a.clone(), a.clone(), a.clone());
        let mut rhs = Mat::from_fn(n, 3, |i, j| (i + j) as f64);
        let (mut x, mut y) = (vec![1.0; n], vec![0.0; n]);
        let mut packed_entries = vec![0.0; packed::packed_len(n)];
        assert_silent("decompose", n, || eig.decompose(a.as_ref()).unwrap());
        assert_silent("projections", n, || {
            project::psd_projection(&eig, a.as_ref(), out.as_mut(), &mut ws);
            project::psd_split(&eig, a.as_ref(), out.as_mut(), side.as_mut(), &mut ws);
            project::rank_projection(&eig, n.div_ceil(3), out.as_mut(), &mut ws);
            project::factor_of_rank_into(&eig, rhs.as_mut().subcols_mut(0, n.min(3)));
        });
        assert_silent("decompose_values_only", n, || {
            eig.decompose_values_only(a.as_ref()).unwrap()
        });
        assert_silent("factor", n, || {
            dense::copy_into(a.as_ref(), l.as_mut());
            cholesky::factor_in_place(l.as_mut(), &mut ws).unwrap();
        });
        assert_silent("solves", n, || {
            cholesky::solve_in_place(l.as_ref(), rhs.as_mut(), &mut ws);
            cholesky::solve_lower_matrix(l.as_ref(), rhs.as_mut());
            cholesky::solve_vector(l.as_ref(), &mut x);
            cholesky::invert_from_factor(l.as_ref(), out.as_mut(), &mut ws);
        });
        assert_silent("products", n, || {
            dense::gemm(out.as_mut(), Accumulate::Replace, 1.0, a.as_ref(), l.as_ref());
            dense::gemm(out.as_mut(), Accumulate::Add, 1.0, a.transpose(), l.as_ref());
            dense::syrk_lower(out.as_mut(), Accumulate::Add, 1.0, a.as_ref());
            dense::gemv(&mut y, Accumulate::Replace, 1.0, a.as_ref(), &x);
            dense::symmetrise(out.as_mut());
            packed::svec(out.as_ref(), &mut packed_entries);
            packed::smat(&packed_entries, out.as_mut());
        });
    }
}

#[test]
fn iterative_kernels_do_not_allocate_once_warm() {
    for n in [1, 2, 17, 200] {
        let a = positive_definite(n);
        let mut op = DenseOperator { matrix: a.as_ref() };
        let mut lanczos = LanczosWorkspace::new();
        assert_silent("step_bound", n, || {
            step_bound(&mut op, &mut lanczos, &StepParams::default());
        });
        let mut ws = CgWorkspace::new();
        let (b, mut x) = (vec![1.0; n], vec![0.0; n]);
        let params = cg::Params { tolerance: 1e-10, max_steps: 50 };
        assert_silent("conjugate gradients", n, || {
            x.fill(0.0);
            cg::solve(&mut op, &b, &mut x, &params, &mut ws);
        });
    }
}
