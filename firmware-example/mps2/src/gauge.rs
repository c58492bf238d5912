//! The gauge on the emulated board: its front end is the simulator at the other end of the link.
//! `cargo board device` starts both and compares every reading with the host's.
#![cfg_attr(target_os = "none", no_std, no_main)]
#![forbid(unsafe_code)]

#[cfg(target_os = "none")]
mod app {
    use core::cell::RefCell;
    use core::mem::MaybeUninit;
    use cortex_m_rt::entry;
    use halfpulse::{Gauge, Scratch};
    use halfpulse_app::acquire::{FrontEnd, ShotCounts};
    use halfpulse_app::gauge_app::{App, RecordMemory, Step};
    use halfpulse_app::link::{Port, SharedPort};
    use halfpulse_app::log::LogSink;
    use halfpulse_app::remote::RemoteReceiver;
    use halfpulse_mps2::board::{self, Board};
    use halfpulse_mps2::plan::{CAPACITY, FIRST_SETUP, PATIENCE_US, PLAN};

    #[entry]
    fn main() -> ! {
        // The attribute lends each of these to this function alone.
        static mut SCRATCH: Scratch<CAPACITY> = Scratch::ZERO;
        static mut CODES: [i16; CAPACITY] = [0; CAPACITY];
        static mut SUMS: [i32; CAPACITY] = [0; CAPACITY];
        static mut GAUGE: MaybeUninit<Gauge<'static>> = MaybeUninit::uninit();
        let board = Board::start();
        let Some(gauge) = start(GAUGE, SCRATCH) else {
            board::exit(false)
        };
        run(
            board,
            gauge,
            RecordMemory {
                codes: CODES,
                sums: SUMS,
            },
        )
    }

    /// Apart, so that its memory is not on the stack while the gauge is made.
    #[inline(never)]
    fn run(board: Board, gauge: &'static mut Gauge<'static>, memory: RecordMemory<'static>) -> ! {
        let port = RefCell::new(Port::new(board.serial));
        let link = SharedPort::new(&port);
        let front_end = FrontEnd {
            receiver: RemoteReceiver::new(link, board.samples, board.delay, PATIENCE_US),
            delay: board.delay,
            plan: PLAN,
            counts: ShotCounts::default(),
        };
        let mut app = App::new(link, front_end, gauge, memory, LogSink, board::stack_used);
        defmt::info!("gauge ready: records of up to {=usize} samples", CAPACITY);
        while app.step() != Step::Finished {}
        defmt::info!("good-bye after {=u32} reports", app.status().reports);
        board::exit(true)
    }

    /// Puts a gauge where it stays: it is a third of what the stack would have to hold.
    #[inline(never)]
    fn start(
        place: &'static mut MaybeUninit<Gauge<'static>>,
        scratch: &'static mut Scratch<CAPACITY>,
    ) -> Option<&'static mut Gauge<'static>> {
        match Gauge::new(FIRST_SETUP, scratch.workspace()) {
            Ok(gauge) => Some(place.write(gauge)),
            Err(_) => None,
        }
    }
}

#[cfg(not(target_os = "none"))]
fn main() {
    eprintln!("this runs on the emulated board: cargo board device");
}
