//! What each stage of a reading costs on the emulated board, and the whole of it. `cargo board cost` runs
//! this, once counting by the board's timer and once by the emulator's plugin.
#![cfg_attr(target_os = "none", no_std, no_main)]
#![forbid(unsafe_code)]

#[cfg(target_os = "none")]
mod app {
    use cortex_m_rt::entry;
    use halfpulse::gauge::stage::{Stage, StageMeter};
    use halfpulse::{Gauge, Record, Scratch};
    use halfpulse_mps2::board::{self, Console};
    use halfpulse_mps2::canned::{CAPACITY, Canned, RECORDS};
    use halfpulse_mps2::printout::{self, Line, Sink};

    #[entry]
    fn main() -> ! {
        // The attribute lends each of these to this function alone.
        static mut SCRATCH: Scratch<CAPACITY> = Scratch::ZERO;
        static mut CODES: [i16; CAPACITY] = [0; CAPACITY];

        let mut console = Console::start();
        for canned in &RECORDS {
            measure(canned, SCRATCH, CODES, &mut console);
        }
        printout::end(&mut console, RECORDS.len() as u32);
        board::exit(true)
    }

    fn measure(canned: &Canned, scratch: &mut Scratch<CAPACITY>, codes: &mut [i16; CAPACITY], console: &mut Console) {
        let record = Record::new(canned.copy_codes(codes), canned.format, canned.clock);
        Line::new(console, "record").words(canned.name).end();
        if let Ok(mut gauge) = Gauge::new(canned.setup, scratch.workspace()) {
            let (outcome, cost) = board::counted(|| gauge.measure(&record));
            write(console, "measure", cost.instructions, outcome.is_ok());
        }
        if let Ok(mut gauge) = Gauge::new(canned.setup, scratch.workspace()) {
            let _ = gauge.measure_metered(&record, &mut Counter(console));
        }
    }

    struct Counter<'c>(&'c mut Console);

    impl StageMeter for Counter<'_> {
        fn meter<R>(&mut self, stage: Stage, work: impl FnOnce() -> R) -> R {
            let (result, cost) = board::counted(work);
            write(self.0, stage.word(), cost.instructions, true);
            result
        }
    }

    fn write(console: &mut impl Sink, what: &str, instructions: u32, reading: bool) {
        Line::new(console, "stage")
            .words(what)
            .word("instructions", instructions)
            .word("reading", u32::from(reading))
            .end();
    }
}

#[cfg(not(target_os = "none"))]
fn main() {
    eprintln!("this runs on the emulated board: cargo board cost");
}
