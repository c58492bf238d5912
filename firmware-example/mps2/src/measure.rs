//! Core and canned records on the emulated board: what the core reads there, to the last bit, and
//! what it costs. `cargo board run` compares with the host, `cargo board figures` prints the costs.
#![cfg_attr(target_os = "none", no_std, no_main)]
#![forbid(unsafe_code)]

#[cfg(target_os = "none")]
mod app {
    use core::mem::MaybeUninit;
    use cortex_m_rt::entry;
    use halfpulse::{Gauge, Record, Scratch, SetupError};
    use halfpulse_mps2::board::{self, Console, Cost};
    use halfpulse_mps2::canned::{CAPACITY, Canned, RECORDS};
    use halfpulse_mps2::printout::{self, Line};

    #[entry]
    fn main() -> ! {
        // The attribute lends each of these to this function alone.
        static mut SCRATCH: Scratch<CAPACITY> = Scratch::ZERO;
        static mut CODES: [i16; CAPACITY] = [0; CAPACITY];
        static mut GAUGE: MaybeUninit<Gauge<'static>> = MaybeUninit::uninit();

        let mut console = Console::start();
        let Some(first) = RECORDS.first() else {
            board::exit(false);
        };
        let mut making = Cost::default();
        let made = board::counted_into(&mut making, || start(GAUGE, first, SCRATCH));
        let Ok(gauge) = made else {
            board::exit(false);
        };
        for canned in &RECORDS {
            measure(canned, gauge, CODES, &mut console);
            if core::ptr::eq(canned, first) {
                write(&mut console, "gauge-new", making);
            }
        }
        printout::end(&mut console, RECORDS.len() as u32);
        board::exit(true)
    }

    /// Puts a gauge where it stays: it is a third of what the stack would have to hold.
    #[inline(never)]
    fn start(
        place: &'static mut MaybeUninit<Gauge<'static>>,
        canned: &Canned,
        scratch: &'static mut Scratch<CAPACITY>,
    ) -> Result<&'static mut Gauge<'static>, SetupError> {
        match Gauge::new(canned.setup, scratch.workspace()) {
            Ok(gauge) => Ok(place.write(gauge)),
            Err(error) => Err(error),
        }
    }

    #[inline(never)]
    fn measure(canned: &Canned, gauge: &mut Gauge<'_>, codes: &mut [i16; CAPACITY], console: &mut Console) {
        let record = Record::new(canned.copy_codes(codes), canned.format, canned.clock);
        let mut measuring = Cost::default();
        if let Err(error) = gauge.change_setup(canned.setup) {
            Line::new(console, "set-up error").sentence(&error).end();
            board::exit(false);
        }
        read(canned, &record, gauge, console, &mut measuring);
        let separating = separate(&record, gauge, console);
        write(console, "measure", measuring);
        write(console, "separate", separating);
    }

    fn write(console: &mut Console, what: &str, cost: Cost) {
        Line::new(console, "cost")
            .words(what)
            .word("instructions", cost.instructions)
            .word("stack", cost.stack)
            .end();
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
