//! A counting allocator: how much memory the current thread holds, and the most it held.
//!
//! One trial runs on one thread, so the thread's count is the trial's. The binary installs
//! [`CountingAllocator`]; where it is not installed, nothing is measured and the figures are absent.
//! Memory freed by another thread than the one that took it is counted where it is freed.

use std::alloc::{GlobalAlloc, Layout, System};
use std::cell::Cell;
use std::sync::atomic::{AtomicBool, Ordering};

thread_local! {
    static HELD: Cell<i64> = const { Cell::new(0) };
    static PEAK: Cell<i64> = const { Cell::new(0) };
}

static INSTALLED: AtomicBool = AtomicBool::new(false);

/// The system allocator with a count per thread.
#[derive(Debug)]
pub struct CountingAllocator;

fn count(change: i64) {
    // A thread that is being torn down has no counters any more; its last frees go uncounted.
    let _ = HELD.try_with(|held| {
        let now = held.get() + change;
        held.set(now);
        let _ = PEAK.try_with(|peak| {
            if now > peak.get() {
                peak.set(now);
            }
        });
    });
}

// SAFETY: every call is handed to `System` unchanged; counting neither allocates nor touches the
// memory handed out.
unsafe impl GlobalAlloc for CountingAllocator {
    unsafe fn alloc(&self, layout: Layout) -> *mut u8 {
        INSTALLED.store(true, Ordering::Relaxed);
        // SAFETY: the caller's contract is `System`'s.
        let pointer = unsafe { System.alloc(layout) };
        if !pointer.is_null() {
            count(layout.size() as i64);
        }
        pointer
    }

    unsafe fn alloc_zeroed(&self, layout: Layout) -> *mut u8 {
        INSTALLED.store(true, Ordering::Relaxed);
        // SAFETY: the caller's contract is `System`'s.
        let pointer = unsafe { System.alloc_zeroed(layout) };
        if !pointer.is_null() {
            count(layout.size() as i64);
        }
        pointer
    }

    unsafe fn dealloc(&self, pointer: *mut u8, layout: Layout) {
        // SAFETY: the caller's contract is `System`'s.
        unsafe { System.dealloc(pointer, layout) };
        count(-(layout.size() as i64));
    }

    unsafe fn realloc(&self, pointer: *mut u8, layout: Layout, size: usize) -> *mut u8 {
        // SAFETY: the caller's contract is `System`'s.
        let moved = unsafe { System.realloc(pointer, layout, size) };
        if !moved.is_null() {
            count(size as i64 - layout.size() as i64);
        }
        moved
    }
}

/// Sets the thread's peak to what it holds now and returns that count.
pub fn begin() -> i64 {
    let held = HELD.with(Cell::get);
    PEAK.with(|peak| peak.set(held));
    held
}

/// Returns the thread's peak since `begin`, less what it held then, or none when the counting
/// allocator is not installed.
pub fn peak_since(start: i64) -> Option<u64> {
    INSTALLED
        .load(Ordering::Relaxed)
        .then(|| u64::try_from(PEAK.with(Cell::get) - start).unwrap_or(0))
}
