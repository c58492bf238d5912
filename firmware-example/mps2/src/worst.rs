//! Counts what readings with their separation cost, of records that lie in the board's sample memory: `cargo board worst`
//! searches with it.
#![cfg_attr(target_os = "none", no_std, no_main)]
#![forbid(unsafe_code)]

#[cfg(target_os = "none")]
mod app {
    use cortex_m_rt::entry;
    use halfpulse::{AdcFormat, Gauge, Record, SampleClock, Scratch};
    use halfpulse_mps2::board::{self, Console, SampleBlock};
    use halfpulse_mps2::canned::CAPACITY;
    use halfpulse_mps2::printout::{self, Line};
    use halfpulse_mps2::search::{HEADER, MOST_RECORDS, SETUPS};

    #[entry]
    fn main() -> ! {
        // The attribute lends each of these to this function alone.
        static mut SCRATCH: Scratch<CAPACITY> = Scratch::ZERO;
        static mut CODES: [i16; CAPACITY] = [0; CAPACITY];

        let mut console = Console::start();
        let mut memory = SampleBlock::start();
        let mut header = [0; HEADER];
        memory.copy_from(0, &mut header);
        let [count, which @ ..] = &header;
        let count = usize::try_from(*count).unwrap_or(0).min(MOST_RECORDS);
        for (number, &setup) in which.iter().take(count).enumerate() {
            memory.copy_from(HEADER + number * CAPACITY, CODES);
            count_one(setup, CODES, SCRATCH, &mut console);
        }
        printout::end(&mut console, count as u32);
        board::exit(true)
    }

    fn count_one(setup: i16, codes: &[i16], scratch: &mut Scratch<CAPACITY>, console: &mut Console) {
        let setup = usize::try_from(setup).ok().and_then(|number| SETUPS.get(number));
        let made = setup.map(|setup| (setup, Gauge::new(*setup, scratch.workspace())));
        let Some((setup, Ok(mut gauge))) = made else {
            board::exit(false);
        };
        let record = Record::new(codes, AdcFormat::signed(12), SampleClock::new(setup.sample_rate));
        let (reading, measuring) = board::counted(|| gauge.measure(&record).is_ok());
        let (_, separating) = board::counted(|| gauge.separate(&record).is_some());
        Line::new(console, "found")
            .word("measure", measuring.instructions)
            .word("separate", separating.instructions)
            .word("stack", measuring.stack.max(separating.stack))
            .word("reading", u32::from(reading))
            .end();
    }
}

#[cfg(not(target_os = "none"))]
fn main() {
    eprintln!("this runs on the emulated board: cargo board worst");
}
