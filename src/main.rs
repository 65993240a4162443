//! The binary: it counts memory for the budgets and hands over to the command line.

use rankassay::budget::memory::CountingAllocator;

#[global_allocator]
static ALLOCATOR: CountingAllocator = CountingAllocator;

fn main() -> std::process::ExitCode {
    rankassay::cli::main()
}
