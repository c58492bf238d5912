//! What each stage of a reading costs on the emulated board, and the whole of it, and beside it the textbook's way through
//! the same number of samples. `cargo board cost` runs this, counting by the board's timer and by the emulator's plugin.
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
    use halfpulse_textbook as textbook;

    #[entry]
    fn main() -> ! {
        // The attribute lends each of these to this function alone.
        static mut SCRATCH: Scratch<CAPACITY> = Scratch::ZERO;
        static mut CODES: [i16; CAPACITY] = [0; CAPACITY];
        static mut PADDED: [f32; CAPACITY + 2 * textbook::PADDING] = [0.0; _];
        static mut OUTPUT: [f32; CAPACITY + textbook::PADDING] = [0.0; _];

        let mut console = Console::start();
        for canned in &RECORDS {
            measure(canned, SCRATCH, CODES, &mut console);
        }
        if let Some(canned) = RECORDS.first() {
            textbook(canned.copy_codes(CODES), PADDED, OUTPUT, &mut console);
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

    /// The textbook's steps in their order; what they compute is checked on the host (`val_textbook`).
    fn textbook(codes: &[i16], padded: &mut [f32], output: &mut [f32], console: &mut Console) {
        Line::new(console, "record").words("textbook").end();
        let mut count = |what: &str, work: &mut dyn FnMut(&mut [f32], &mut [f32])| {
            let ((), cost) = board::counted(|| work(padded, output));
            write(console, what, cost.instructions, true);
        };
        count("convert", &mut |padded, _| textbook::convert(codes, padded));
        count("hilbert", &mut |padded, output| {
            let samples = padded.get(textbook::HILBERT_DELAY..).unwrap_or(&[]);
            let output = output.get_mut(..codes.len()).unwrap_or(&mut []);
            textbook::filter(&textbook::HILBERT, samples, output);
        });
        count("magnitude", &mut |padded, output| {
            let samples = padded.get(textbook::PADDING..).unwrap_or(&[]);
            let output = output.get_mut(..codes.len()).unwrap_or(&mut []);
            textbook::magnitude(samples, output, |square| board::square_root(square));
        });
        count("correlation", &mut |padded, output| {
            textbook::filter(&textbook::PULSE, padded, output);
        });
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
