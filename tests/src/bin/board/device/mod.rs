//! `cargo board device`: the gauge in the emulator, its front end the simulator here; every reading is
//! compared with what this machine makes of the same shots.

mod emulated;
mod faults;
mod log;
mod places;

use crate::toolchain::{CORTEX_M0_PLUS, CORTEX_M4F, Toolchain};
use crate::{Checks, Trouble, figures, image};
use emulated::{Core, EmulatedGauge};
use halfpulse::{Averager, Gauge, Record, Scratch};
use halfpulse_app::acquire::{FrontEnd, Request, ShotCounts};
use halfpulse_app::link::{FrontEndFault, LinkReport, Outcome, Status};
use halfpulse_app::report::{Report, Shortfall};
use halfpulse_mps2::plan::{CAPACITY, PLAN};
use halfpulse_sim::link::{FiredShot, NoDelay};
use places::Place;
use std::io::{IsTerminal, Write};
use std::time::{Duration, Instant};

/// Readings on the core with a floating point unit.
const READINGS: u32 = 200;
/// Readings on the core without one, where each takes longer.
const READINGS_WITHOUT_UNIT: u32 = 20;
/// For one reading: 64 shots, each with a bounded wait, on a busy machine.
const PATIENCE: Duration = Duration::from_secs(60);

/// What a series of readings came to.
#[derive(Debug, Default)]
struct Tally {
    readings: u32,
    doubted: u32,
    refusals: u32,
    shots: u32,
    numbers: u32,
}

pub fn run(checks: &mut Checks) -> Result<(), Trouble> {
    let budget = figures::read_budget().map_err(Trouble::Failed)?;
    for (core, target, readings) in [
        (Core::M4F, CORTEX_M4F, READINGS),
        (Core::WithoutUnit, CORTEX_M0_PLUS, READINGS_WITHOUT_UNIT),
    ] {
        let toolchain = Toolchain::find(target)?;
        let file = toolchain.build_anyhow("gauge")?;
        let sizes = image::sizes(&file).map_err(Trouble::Failed)?;
        let mut gauge = EmulatedGauge::start(&file, core).map_err(Trouble::from)?;
        say!(
            "{}: {} bytes of flash, {} of static RAM",
            core.name(),
            sizes.flash,
            sizes.static_ram
        );
        let began = Instant::now();
        let same = same_bits(&mut gauge, readings);
        let word = core.word();
        let status = gauge.conversation.query(PATIENCE);
        checks.check(
            &format!("{readings}_readings_to_the_last_bit_{word}"),
            same.map(|tally| summary(&tally, began.elapsed(), core)),
        );
        if core == Core::M4F {
            faults::run(checks, &mut gauge);
            checks.check(
                "static_ram_of_the_whole_gauge",
                within(
                    "bytes of static RAM with codes, sums and scratch memory",
                    sizes.static_ram,
                    budget.static_ram_bytes,
                ),
            );
            checks.check(
                "stack_of_the_whole_gauge",
                status.map_err(|error| error.to_string()).and_then(|status: Status| {
                    within("bytes of stack at most", status.stack.into(), budget.gauge_stack_bytes)
                }),
            );
        }
        let log = gauge.finish();
        checks.check(
            &format!("the_log_can_be_read_{word}"),
            log.and_then(|bytes| log::read(&file, &bytes, readings)),
        );
    }
    Ok(())
}

fn within(what: &str, value: u64, limit: u64) -> Result<String, String> {
    let text = format!("{value} {what}; budget {limit}");
    if value > 0 && value <= limit {
        Ok(text)
    } else {
        Err(text)
    }
}

fn summary(tally: &Tally, took: Duration, core: Core) -> String {
    format!(
        "{}: {} readings ({} with doubts) and {} refusals from {} shots; {} numbers agree with this machine to the last bit; {:.1} s",
        core.name(),
        tally.readings,
        tally.doubted,
        tally.refusals,
        tally.shots,
        tally.numbers,
        took.as_secs_f32()
    )
}

/// Takes the readings, each of its own place, and compares them.
fn same_bits(gauge: &mut EmulatedGauge, count: u32) -> Result<Tally, String> {
    let mut tally = Tally::default();
    let mut in_force = None;
    let bases = places::bases()?;
    for number in 0..count {
        let place = Place::new(&bases, number);
        progress(number, count, &place.name);
        if in_force != Some(place.setup) {
            let answer = gauge.conversation.set_up(&place.setup, PATIENCE);
            answer.map_err(|error| format!("{}: {error}", place.name))?;
            let (samples, quality) = place.pulse.clone().unwrap_or_default();
            let answer = gauge.conversation.teach_pulse(&samples, quality, PATIENCE);
            answer.map_err(|error| format!("{}: {error}", place.name))?;
            in_force = Some(place.setup);
        }
        *gauge.front_end() = place.receiver();
        gauge.conversation.take_shots();
        let report = gauge.conversation.take(&place.take, PATIENCE);
        let report = report.map_err(|error| format!("{}: {error}", place.name))?;
        let shots = gauge.conversation.take_shots();
        compare(&place, &report, &shots).map_err(|why| format!("reading {number}, {}: {why}", place.name))?;
        tally.shots += u32::try_from(shots.len()).unwrap_or(u32::MAX);
        // Gain, noise, index and fraction of each echo, and what the outcome holds.
        tally.numbers += 2 + 2 * u32::try_from(report.echoes.len()).unwrap_or(0);
        match report.outcome {
            Outcome::Reading(reading) => {
                tally.readings += 1;
                tally.doubted += u32::from(reading.doubts != 0);
                let coating = reading
                    .coating
                    .map(|coating| 2 + 2 * u32::from(coating.thickness.is_some()));
                tally.numbers += 5 + coating.unwrap_or(0);
            }
            Outcome::NoReading(_) => {
                tally.refusals += 1;
                tally.numbers += 4;
            }
            Outcome::Fault(code) => return Err(format!("{}: fault {code}", place.name)),
        }
    }
    progress(count, count, "done");
    // Places of all kinds: some must give a reading, and some must not.
    if tally.readings * 4 < count || tally.refusals == 0 {
        return Err(format!("these places prove little: {tally:?}"));
    }
    Ok(tally)
}

/// One line that is written over, for people; nothing in a file.
fn progress(done: u32, all: u32, what: &str) {
    let mut out = std::io::stderr();
    if out.is_terminal() {
        let end = if done == all { "\n" } else { "" };
        let _ = write!(out, "\r{done:>4} of {all} readings: {what:<40}{end}");
    }
}

/// The gauge's report against the host's: of the very codes that were sent, and of a host that went
/// through the acquisition itself, in front of a simulator of the same seed.
fn compare(place: &Place, report: &LinkReport, shots: &[FiredShot]) -> Result<(), String> {
    let mut scratch = Box::new(Scratch::<CAPACITY>::ZERO);
    let mut gauge = Gauge::new(place.setup, scratch.workspace()).map_err(|error| error.to_string())?;
    if let Some((samples, quality)) = &place.pulse {
        let learned = gauge.learn_pulse_of_quality(samples, *quality);
        learned.map_err(|error| error.to_string())?;
    }
    let (mut codes, mut sums) = (vec![0i16; CAPACITY], vec![0i32; CAPACITY]);

    let wanted = usize::from(report.shots);
    let averaged = shots.len().checked_sub(wanted).and_then(|from| shots.get(from..));
    let averaged =
        averaged.ok_or_else(|| format!("the report speaks of {wanted} shots, {} were fired", shots.len()))?;
    let last = averaged.last().ok_or("no shot was fired")?;
    let mut average = Averager::new(&mut sums);
    for shot in averaged {
        let record = Record::new(&shot.codes, shot.fired.format, shot.fired.clock);
        average.add(&record).map_err(|error| error.to_string())?;
    }
    let record = if wanted == 1 {
        Record::new(&last.codes, last.fired.format, last.fired.clock)
    } else {
        average.finish(&mut codes).map_err(|error| error.to_string())?
    };
    let outcome = gauge.measure(&record).map_err(Shortfall::NoReading);
    let of_these_codes = Report {
        number: place.take.number,
        shots: record.format().shots,
        gain: last.fired.gain,
        outcome,
        findings: Some(gauge.findings()),
    };
    same(&of_these_codes.to_link(), report, "of the same codes")?;

    let mut front_end = FrontEnd {
        receiver: place.receiver(),
        delay: NoDelay,
        plan: PLAN,
        counts: ShotCounts::default(),
    };
    let request = Request {
        shots: place.take.shots,
        samples: usize::from(place.take.samples),
        gain: place.take.gain,
        window: place.setup.window,
    };
    let acquired = front_end.acquire(&request, &mut codes, &mut sums);
    let acquired = acquired.map_err(|fault| format!("the host's own acquisition: {fault}"))?;
    if front_end.counts.fired as usize != shots.len() || acquired.gain != last.fired.gain {
        return Err(format!(
            "the gauge fired {} shots and ended at {} dB, the host {} and {} dB",
            shots.len(),
            last.fired.gain.get(),
            front_end.counts.fired,
            acquired.gain.get()
        ));
    }
    let outcome = gauge.measure(&acquired.record).map_err(Shortfall::NoReading);
    let by_itself = Report {
        number: place.take.number,
        shots: acquired.record.format().shots,
        gain: acquired.gain,
        outcome,
        findings: Some(gauge.findings()),
    };
    same(&by_itself.to_link(), report, "by its own acquisition")
}

/// Bit by bit: the bytes on the link are the bits of every number.
fn same(host: &LinkReport, board: &LinkReport, how: &str) -> Result<(), String> {
    if places::bytes_of(host) == places::bytes_of(board) {
        Ok(())
    } else {
        Err(format!(
            "board and host {how} differ\nhost:  {host:?}\nboard: {board:?}"
        ))
    }
}

/// A front end of the simulator's never fails in these series.
impl From<emulated::StartError> for Trouble {
    fn from(error: emulated::StartError) -> Self {
        match error {
            emulated::StartError::NoEmulator(trouble) => trouble,
            emulated::StartError::Failed(text) => Self::Failed(text),
        }
    }
}

/// Words for what kept a front end from firing.
fn words(fault: FrontEndFault) -> &'static str {
    halfpulse_app::report::Fault::NotFired(fault).sentence()
}
