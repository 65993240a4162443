//! What the fuzz targets share: the bound on memory that every reader is held to, and journals in a spelling
//! that can be edited.
//!
//! A reader may take memory in proportion to the text it reads and a fixed amount besides; a size that
//! the text only declares must not be taken for it. The counting allocator of the program counts memory
//! that is asked for, whether or not it is ever touched, so that one input suffices to find out.

pub mod seal;

use rankassay::budget::memory::{self, CountingAllocator};

#[global_allocator]
static ALLOCATOR: CountingAllocator = CountingAllocator;

/// Memory that any reader may take, in bytes.
pub const FLOOR: u64 = 4 << 20;

/// Memory that a reader may take for each byte of text, in bytes.
pub const PER_BYTE: u64 = 400;

/// Runs `read` on a text of `length` bytes and returns what it returns.
///
/// # Panics
/// It held more than [`FLOOR`] and [`PER_BYTE`] for each byte at some time.
pub fn bounded<T>(length: usize, read: impl FnOnce() -> T) -> T {
    let start = memory::begin();
    let result = read();
    let peak = memory::peak_since(start).expect("the counting allocator is installed above");
    let most = FLOOR + PER_BYTE * length as u64;
    assert!(peak <= most, "{peak} bytes of memory for {length} bytes of text");
    result
}
