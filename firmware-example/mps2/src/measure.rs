//! Core and canned records on the emulated board: what the core reads there, to the last bit, and
//! what it costs. `cargo board run` compares with the host, `cargo board figures` prints the costs.
#![cfg_attr(target_os = "none", no_std, no_main)]
#![forbid(unsafe_code)]

#[cfg(target_os = "none")]
mod app {
    use cortex_m_rt::entry;
    use halfpulse::{Gauge, Record, Scratch};
    use halfpulse_mps2::board::{self, Console, Cost};
    use halfpulse_mps2::canned::{CAPACITY, Canned, RECORDS};
    use halfpulse_mps2::printout::{self, Line};

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
        let (mut making, mut measuring) = (Cost::default(), Cost::default());
        // Not taken out of its result: that would be a second copy on the stack.
        let mut made = board::counted_into(&mut making, || Gauge::new(canned.setup, scratch.workspace()));
        let gauge = match &mut made {
            Ok(gauge) => gauge,
            Err(error) => {
                Line::new(console, "set-up error").sentence(error).end();
                board::exit(false);
            }
        };
        read(canned, &record, gauge, console, &mut measuring);
        let separating = separate(&record, gauge, console);
        for (what, cost) in [("gauge-new", making), ("measure", measuring), ("separate", separating)] {
            Line::new(console, "cost")
                .words(what)
                .word("instructions", cost.instructions)
                .word("stack", cost.stack)
                .end();
        }
    }

    /// Apart, so that what is read is off the stack when the next thing begins.
    #[inline(never)]
    fn read(canned: &Canned, record: &Record<'_>, gauge: &mut Gauge<'_>, console: &mut Console, cost: &mut Cost) {
        let outcome = board::counted_into(cost, || {
            #[cfg(feature = "planted-panic")]
            planted_panic(record.codes());
            gauge.measure(record)
        });
        printout::outcome(console, canned.name, &outcome, gauge.findings());
    }

    #[inline(never)]
    fn separate(record: &Record<'_>, gauge: &mut Gauge<'_>, console: &mut Console) -> Cost {
        let (separation, cost) = board::counted(|| gauge.separate(record));
        printout::separation(console, separation.as_ref());
        cost
    }

    /// What the core must never hold: an index that could lie outside.
    #[cfg(feature = "planted-panic")]
    fn planted_panic(codes: &[i16]) {
        let place = core::hint::black_box(1);
        core::hint::black_box(codes[place]);
    }
}

#[cfg(not(target_os = "none"))]
fn main() {
    eprintln!("this runs on the emulated board: cargo board run");
}
