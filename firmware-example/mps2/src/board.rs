//! Everything that touches the emulated board: registers, stack, the way out. All `unsafe` is here.
//!
//! The board is QEMU's `mps2-an386`. Its timers count 25 MHz; with `-icount shift=7` one instruction
//! takes 128 ns of the emulator's time, so that 3.2 ticks pass in one instruction, on every machine
//! and under any load.

use crate::transcript::Sink;
use core::arch::asm;
use core::ptr;
use cortex_m_rt::{ExceptionFrame, exception};
use cortex_m_semihosting::{debug, hio};

/// First of the board's CMSDK timers (Arm AN386, section 3.7, from memory): control, value (counts down), reload.
const TIMER_CONTROL: *mut u32 = ptr::without_provenance_mut(0x4000_0000);
const TIMER_VALUE: *mut u32 = ptr::without_provenance_mut(0x4000_0004);
const TIMER_RELOAD: *mut u32 = ptr::without_provenance_mut(0x4000_0008);

/// How much stack is painted below the caller: also the most that can be reported.
const PAINTED: usize = 16 * 1024;
const PAINT: u32 = 0xcccc_cccc;

/// The developer's console, through the emulator.
pub struct Console(Option<hio::HostStream>);

impl Console {
    /// Opens the console and starts the timer.
    #[must_use]
    pub fn start() -> Self {
        // SAFETY: the timer's registers, used by nobody else; 32-bit accesses as the manual asks for.
        unsafe {
            TIMER_RELOAD.write_volatile(u32::MAX);
            TIMER_VALUE.write_volatile(u32::MAX);
            TIMER_CONTROL.write_volatile(1);
        }
        Self(hio::hstdout().ok())
    }
}

impl Sink for Console {
    fn text(&mut self, text: &str) {
        if let Some(stream) = &mut self.0
            && stream.write_all(text.as_bytes()).is_err()
        {
            exit(false);
        }
    }
}

/// What a piece of work took.
#[derive(Clone, Copy, Debug)]
pub struct Cost {
    /// Executed instructions, if the emulator runs with `-icount shift=7`; good to about ten.
    pub instructions: u32,
    /// Bytes of stack from its beginning to the deepest call, the caller's frames included.
    pub stack: u32,
}

/// Does some work, counts its instructions and the stack that it uses.
pub fn counted<R>(work: impl FnOnce() -> R) -> (R, Cost) {
    let top = stack_pointer();
    paint_below(top);
    let before = ticks();
    let result = apart(work);
    let passed = before.wrapping_sub(ticks());
    let stack = (stack_start().wrapping_sub(top) as u32) + used_below(top);
    let instructions = (u64::from(passed) * 10 / 32) as u32;
    (result, Cost { instructions, stack })
}

/// Keeps the work's frame out of the caller's, where the paint would not see it.
#[inline(never)]
fn apart<R>(work: impl FnOnce() -> R) -> R {
    work()
}

/// Where the stack begins.
fn stack_start() -> usize {
    unsafe extern "C" {
        /// Made by the start-up code's linker script.
        static _stack_start: u32;
    }
    (&raw const _stack_start).addr()
}

#[inline(always)]
fn stack_pointer() -> usize {
    let pointer: usize;
    // SAFETY: reads one register.
    unsafe { asm!("mov {}, sp", out(reg) pointer, options(nomem, nostack, preserves_flags)) };
    pointer
}

/// The painted words below `top`, from the lowest.
#[inline(always)]
fn words_below(top: usize) -> impl Iterator<Item = *mut u32> {
    let bottom = top.wrapping_sub(PAINTED);
    (0..PAINTED / 4).map(move |word| ptr::with_exposed_provenance_mut(bottom.wrapping_add(4 * word)))
}

#[inline(always)]
fn paint_below(top: usize) {
    for word in words_below(top) {
        // SAFETY: below the stack pointer nothing is in use (no interrupt is enabled), and the board has
        // megabytes of memory there.
        unsafe { word.write_volatile(PAINT) };
    }
}

#[inline(always)]
fn used_below(top: usize) -> u32 {
    let mut untouched = 0;
    for word in words_below(top) {
        // SAFETY: as in `paint_below`.
        if unsafe { word.read_volatile() } != PAINT {
            break;
        }
        untouched += 4;
    }
    (PAINTED - untouched) as u32
}

fn ticks() -> u32 {
    // SAFETY: reading the timer changes nothing.
    unsafe { TIMER_VALUE.read_volatile() }
}

/// Leaves the emulator.
pub fn exit(success: bool) -> ! {
    loop {
        debug::exit(if success {
            debug::EXIT_SUCCESS
        } else {
            debug::EXIT_FAILURE
        });
    }
}

#[exception]
unsafe fn HardFault(_frame: &ExceptionFrame) -> ! {
    Console(hio::hstdout().ok()).text("hard fault\n");
    exit(false)
}

/// Cannot be linked: an image in which a panic can be reached is not built at all.
#[cfg(not(feature = "panic-report"))]
#[panic_handler]
fn panic(_: &core::panic::PanicInfo<'_>) -> ! {
    unsafe extern "C" {
        #[link_name = "\n\n*** a panic is reachable: `cargo board panics` says from where ***\n"]
        safe fn a_panic_is_reachable() -> !;
    }
    a_panic_is_reachable()
}

/// Says where, for the search after a panic that the default handler has found.
#[cfg(feature = "panic-report")]
#[panic_handler]
fn panic(info: &core::panic::PanicInfo<'_>) -> ! {
    let mut console = Console(hio::hstdout().ok());
    crate::transcript::Line::new(&mut console, "panic").sentence(info).end();
    exit(false)
}
