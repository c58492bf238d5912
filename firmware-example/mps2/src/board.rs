//! Everything that touches the emulated board: registers, stack, the way out. All `unsafe` is here.
//!
//! The board is QEMU's `mps2-an386`. Its timers count 25 MHz; with `-icount shift=7` one instruction
//! takes 128 ns of the emulator's time, so that 3.2 ticks pass in one instruction, on every machine
//! and under any load.

use crate::printout::Sink;
use core::arch::asm;
use core::cell::UnsafeCell;
use core::ptr;
use core::sync::atomic::{AtomicUsize, Ordering, fence};
use cortex_m_rt::{ExceptionFrame, exception};
use cortex_m_semihosting::{debug, hio};
use halfpulse_app::remote::SampleMemory;

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
        start_timer();
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

/// Second of the board's CMSDK serial ports (Arm AN386, section 3.8, from memory): data, state (bit 0: no
/// room to write, bit 1: a byte to read), control, and the divider that the speed follows from.
const SERIAL_DATA: *mut u32 = ptr::without_provenance_mut(0x4000_5000);
const SERIAL_STATE: *mut u32 = ptr::without_provenance_mut(0x4000_5004);
const SERIAL_CONTROL: *mut u32 = ptr::without_provenance_mut(0x4000_5008);
const SERIAL_DIVIDER: *mut u32 = ptr::without_provenance_mut(0x4000_5010);

/// The board's PSRAM, in the emulator a file: where the front end's samples arrive.
const SAMPLES: *const i16 = ptr::without_provenance(0x2100_0000);
/// How many fit.
const MOST_SAMPLES: usize = 8 * 1024 * 1024;

/// Ticks of the timer in a microsecond.
const TICKS_PER_US: u32 = 25;
/// Longest wait for room in the serial port: 200 ms.
const LONGEST_WRITE: u32 = 200_000 * TICKS_PER_US;

/// What the gauge needs of the board.
#[derive(Debug)]
pub struct Board {
    /// The link.
    pub serial: Serial,
    /// Where the samples arrive.
    pub samples: SampleBlock,
    /// The clock.
    pub delay: Delay,
}

impl Board {
    /// Starts timer and serial port, and paints the stack. To be called once, first of all.
    #[must_use]
    pub fn start() -> Self {
        start_timer();
        // SAFETY: the port's registers, used by nobody else; 32-bit accesses as the manual asks for.
        unsafe {
            // The smallest divider that is allowed; the emulator knows no speed.
            SERIAL_DIVIDER.write_volatile(16);
            SERIAL_CONTROL.write_volatile(0b11);
        }
        let top = stack_pointer();
        paint_below(top);
        PAINTED_FROM.store(top, Ordering::Relaxed);
        Self {
            serial: Serial(()),
            samples: SampleBlock(()),
            delay: Delay(()),
        }
    }
}

/// Where the painted stack begins.
static PAINTED_FROM: AtomicUsize = AtomicUsize::new(0);

/// Most bytes of stack that were in use since [`Board::start`].
#[must_use]
pub fn stack_used() -> u32 {
    let top = PAINTED_FROM.load(Ordering::Relaxed);
    (stack_start().wrapping_sub(top) as u32) + used_below(top)
}

/// The second serial port.
#[derive(Debug)]
pub struct Serial(());

impl Serial {
    fn state() -> u32 {
        // SAFETY: reading the state changes nothing.
        unsafe { SERIAL_STATE.read_volatile() }
    }
}

impl embedded_io::ErrorType for Serial {
    type Error = embedded_io::ErrorKind;
}

impl embedded_io::ReadReady for Serial {
    fn read_ready(&mut self) -> Result<bool, Self::Error> {
        Ok(Self::state() & 2 != 0)
    }
}

impl embedded_io::Read for Serial {
    /// Gives what is there and never waits: no byte, if there is none.
    fn read(&mut self, bytes: &mut [u8]) -> Result<usize, Self::Error> {
        let mut read = 0;
        for place in bytes {
            if Self::state() & 2 == 0 {
                break;
            }
            // SAFETY: there is a byte, and reading takes it.
            *place = unsafe { SERIAL_DATA.read_volatile() } as u8;
            read += 1;
        }
        Ok(read)
    }
}

impl embedded_io::Write for Serial {
    fn write(&mut self, bytes: &[u8]) -> Result<usize, Self::Error> {
        for &byte in bytes {
            let start = ticks();
            while Self::state() & 1 != 0 {
                if start.wrapping_sub(ticks()) > LONGEST_WRITE {
                    return Err(embedded_io::ErrorKind::TimedOut);
                }
            }
            // SAFETY: there is room for a byte.
            unsafe { SERIAL_DATA.write_volatile(u32::from(byte)) };
        }
        Ok(bytes.len())
    }

    fn flush(&mut self) -> Result<(), Self::Error> {
        Ok(())
    }
}

/// The memory into which the front end writes its samples, as a converter's DMA would.
#[derive(Debug)]
pub struct SampleBlock(());

impl SampleBlock {
    /// All that lies there; to be called once.
    #[must_use]
    pub fn start() -> Self {
        Self(())
    }

    /// Copies what lies from the sample number `first` on; beyond the memory nothing is copied.
    pub fn copy_from(&mut self, first: usize, codes: &mut [i16]) {
        fence(Ordering::SeqCst);
        for (place, code) in (first..MOST_SAMPLES).zip(codes) {
            // SAFETY: inside the PSRAM, which only the front end writes to; volatile, because the
            // compiler does not know of it. Halves of two shots are found out by the check sum.
            *code = unsafe { SAMPLES.wrapping_add(place).read_volatile() };
        }
    }
}

impl SampleMemory for SampleBlock {
    fn copy(&mut self, codes: &mut [i16]) {
        self.copy_from(0, codes);
    }
}

/// Waits by the board's timer.
#[derive(Clone, Copy, Debug)]
pub struct Delay(());

impl embedded_hal::delay::DelayNs for Delay {
    fn delay_ns(&mut self, ns: u32) {
        // Rounded up: 40 ns a tick.
        let wanted = ns / 40 + 1;
        let start = ticks();
        while start.wrapping_sub(ticks()) < wanted {}
    }
}

/// What a piece of work took.
#[derive(Clone, Copy, Debug, Default)]
pub struct Cost {
    /// Executed instructions, if the emulator runs with `-icount shift=7`; good to about ten.
    pub instructions: u32,
    /// Bytes of stack from its beginning to the deepest call, the caller's frames included.
    pub stack: u32,
}

/// Does some work, counts its instructions and the stack that it uses.
pub fn counted<R>(work: impl FnOnce() -> R) -> (R, Cost) {
    let mut cost = Cost::default();
    let result = counted_into(&mut cost, work);
    (result, cost)
}

/// The same for a large result, which goes straight to where it is kept: in a tuple it would be on the stack twice.
#[inline(always)]
pub fn counted_into<R>(cost: &mut Cost, work: impl FnOnce() -> R) -> R {
    let top = stack_pointer();
    paint_below(top);
    let before = ticks();
    open_region();
    let result = apart(work);
    close_region();
    let passed = before.wrapping_sub(ticks());
    *cost = Cost {
        instructions: (u64::from(passed) * 10 / 32) as u32,
        stack: (stack_start().wrapping_sub(top) as u32) + used_below(top),
    };
    result
}

/// The processor's own square root, one instruction of its floating point unit (`core` has none without `std`).
#[must_use]
#[inline(always)]
pub fn square_root(value: f32) -> f32 {
    let mut bits = value.to_bits();
    // SAFETY: computes with one register of the floating point unit, which it names as lost.
    unsafe {
        asm!(
            "vmov s0, {0}", "vsqrt.f32 s0, s0", "vmov {0}, s0",
            inout(reg) bits, out("s0") _, options(pure, nomem, nostack, preserves_flags)
        );
    };
    f32::from_bits(bits)
}

/// Tells the emulator's counting plugin (`cargo board cost`) that a region begins; elsewhere it does nothing.
#[inline(always)]
fn open_region() {
    // SAFETY: moves a register to itself.
    unsafe { asm!("mov r10, r10", options(nostack, preserves_flags)) };
}

/// The end of the region.
#[inline(always)]
fn close_region() {
    // SAFETY: moves a register to itself.
    unsafe { asm!("mov r11, r11", options(nostack, preserves_flags)) };
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

fn start_timer() {
    // SAFETY: the timer's registers, used by nobody else; 32-bit accesses as the manual asks for.
    unsafe {
        TIMER_RELOAD.write_volatile(u32::MAX);
        TIMER_VALUE.write_volatile(u32::MAX);
        TIMER_CONTROL.write_volatile(1);
    }
}

fn ticks() -> u32 {
    // SAFETY: reading the timer changes nothing.
    unsafe { TIMER_VALUE.read_volatile() }
}

/// Where the log goes: the developer's console, through the emulator, as raw frames.
#[defmt::global_logger]
struct Log;

/// Console and encoder of the log.
struct LogState(UnsafeCell<(Option<hio::HostStream>, defmt::Encoder)>);

// SAFETY: the board has one core, and no interrupt is enabled: nobody else is there to share it with.
unsafe impl Sync for LogState {}

static LOG: LogState = LogState(UnsafeCell::new((None, defmt::Encoder::new())));

fn with_log(work: impl FnOnce(&mut defmt::Encoder, &mut dyn FnMut(&[u8]))) {
    // SAFETY: nobody else uses it (see above), and what `work` calls does not log.
    let (console, encoder) = unsafe { &mut *LOG.0.get() };
    if console.is_none() {
        *console = hio::hstdout().ok();
    }
    // A console that is closed loses lines and nothing else.
    work(encoder, &mut |bytes| {
        if let Some(console) = console {
            let _ = console.write_all(bytes);
        }
    });
}

// SAFETY: frames are begun and ended in turn, since there is one thread and no interrupt.
unsafe impl defmt::Logger for Log {
    fn acquire() {
        with_log(|encoder, out| encoder.start_frame(out));
    }

    unsafe fn flush() {}

    unsafe fn release() {
        with_log(|encoder, out| encoder.end_frame(out));
    }

    unsafe fn write(bytes: &[u8]) {
        with_log(|encoder, out| encoder.write(bytes, out));
    }
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
    crate::printout::Line::new(&mut console, "panic").sentence(info).end();
    exit(false)
}
