//! What libFuzzer calls: it has the `main`, and asks this for one input after the other. A panic ends the process, and libFuzzer keeps the input.

/// Makes a function of bytes the target. What takes its time to make is made before the first input.
macro_rules! target {
    ($run:path, after $static:path) => {
        engine::target!($run);

        #[unsafe(no_mangle)]
        extern "C" fn LLVMFuzzerInitialize(_: *const std::ffi::c_int, _: *const std::ffi::c_void) -> std::ffi::c_int {
            std::sync::LazyLock::force(&$static);
            0
        }
    };
    ($run:path) => {
        #[unsafe(no_mangle)]
        extern "C" fn LLVMFuzzerTestOneInput(data: *const u8, size: usize) -> std::ffi::c_int {
            // SAFETY: libFuzzer's promise is that there are `size` bytes at `data`, which may be null where there are none.
            let input = if size == 0 { &[] } else { unsafe { std::slice::from_raw_parts(data, size) } };
            $run(input);
            0
        }
    };
}
pub(crate) use target;
