//! The gauge on the emulated board: its front end is the simulator at the other end of the link.
//! `cargo board device` starts both and compares every reading with the host's.
#![cfg_attr(target_os = "none", no_std, no_main)]
#![forbid(unsafe_code)]

#[cfg(target_os = "none")]
mod app {
    use core::cell::RefCell;
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
        let board = Board::start();
        let port = RefCell::new(Port::new(board.serial));
        let link = SharedPort::new(&port);
        // Not taken out of its result: that would be a second copy on the stack.
        let mut made = Gauge::new(FIRST_SETUP, SCRATCH.workspace());
        let Ok(gauge) = &mut made else { board::exit(false) };
        let front_end = FrontEnd {
            receiver: RemoteReceiver::new(link, board.samples, board.delay, PATIENCE_US),
            delay: board.delay,
            plan: PLAN,
            counts: ShotCounts::default(),
        };
        let memory = RecordMemory {
            codes: CODES,
            sums: SUMS,
        };
        let mut app = App::new(link, front_end, gauge, memory, LogSink, board::stack_used);
        defmt::info!("gauge ready: records of up to {=usize} samples", CAPACITY);
        while app.step() != Step::Finished {}
        defmt::info!("good-bye after {=u32} reports", app.status().reports);
        board::exit(true)
    }
}

#[cfg(not(target_os = "none"))]
fn main() {
    eprintln!("this runs on the emulated board: cargo board device");
}
