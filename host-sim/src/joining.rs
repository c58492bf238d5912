//! Shots of one place to one record: averages, two rounds, interleaved delays; and the trigger's jitter from them.
//!
//! How a file's shots are taken: one after the other. Averages of two shots or more are made of two rounds, the first half of
//! the shots and the second, so that what moved in between, and what only one half has, is noticed. Delayed shots come in rounds
//! too: shot n has delay n mod phases.

use crate::input_error::InputError;
use crate::measuring::{self, Measured, Refusal, Shot};
use halfpulse::record::average::{MOST_SHOTS, shot_delay};
use halfpulse::{
    AdcFormat, AverageError, Averager, Decibels, Echo, Findings, Gauge, Interleaver, Jitter, Metres, NoReading, Record,
    SampleClock, Seconds, ShotArrivals, TwoRounds,
};
use std::path::Path;

/// What becomes of a file's shots.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Joining {
    /// Each is measured alone.
    None,
    /// So many at a time are averaged; all of them if no number is given.
    Average(Option<u16>),
    /// So many delays make one dense record.
    Interleave {
        /// How many.
        phases: u8,
        /// Nothing can move: a single round needs no delay fired again.
        still: bool,
    },
}

impl Joining {
    /// What becomes of a campaign's shots of one run.
    #[must_use]
    pub const fn of_run(shots: u64) -> Self {
        if shots > 1 { Self::Average(None) } else { Self::None }
    }

    /// Samples of the record for each of a shot.
    #[must_use]
    pub const fn phases(self) -> u8 {
        match self {
            Self::None | Self::Average(_) => 1,
            Self::Interleave { phases, .. } => phases,
        }
    }
}

/// One record to measure.
#[derive(Clone, Debug)]
pub enum Joined {
    /// A shot, or an average.
    Shot(Shot),
    /// Two rounds of one place.
    Rounds {
        /// Which of the file's averages; `None` if there is but one.
        number: Option<usize>,
        /// The first half of the shots.
        earlier: Vec<i16>,
        /// The second half.
        later: Vec<i16>,
        /// Of either.
        format: AdcFormat,
    },
    /// What moved while it was taken is no record.
    Refused {
        /// Why.
        refusal: Refusal,
        /// What a code would stand for.
        format: AdcFormat,
    },
}

impl Joined {
    /// Which of the file's shots or averages; `None` if it is the only one.
    #[must_use]
    pub const fn number(&self) -> Option<usize> {
        match self {
            Self::Shot(Shot { number, .. }) | Self::Rounds { number, .. } => *number,
            Self::Refused { .. } => None,
        }
    }

    /// Codes that show what the record looks like: of two rounds the first.
    #[must_use]
    pub fn codes(&self) -> &[i16] {
        match self {
            Self::Shot(Shot { codes, .. }) | Self::Rounds { earlier: codes, .. } => codes,
            Self::Refused { .. } => &[],
        }
    }

    /// The record as one shot: the mean of two rounds; `None` of what is no record.
    #[must_use]
    pub fn into_shot(self, clock: SampleClock) -> Option<Shot> {
        match self {
            Self::Shot(shot) => Some(shot),
            Self::Rounds {
                number,
                mut earlier,
                mut later,
                format,
            } => {
                let mean = TwoRounds::new(&mut earlier, &mut later, format, clock).ok()?.mean();
                Some(Shot {
                    number,
                    codes: mean.codes().to_vec(),
                    format: mean.format(),
                })
            }
            Self::Refused { .. } => None,
        }
    }

    /// What those codes stand for.
    #[must_use]
    pub const fn format(&self) -> AdcFormat {
        match self {
            Self::Shot(Shot { format, .. }) | Self::Rounds { format, .. } | Self::Refused { format, .. } => *format,
        }
    }
}

/// The records that a file's shots make, and their clock. `clock` is that of a shot without delay.
///
/// # Errors
/// A number of shots that does not fit, with the ones that do.
pub fn join(
    path: &Path,
    shots: Vec<Vec<i16>>,
    format: AdcFormat,
    clock: SampleClock,
    joining: Joining,
    jitter: Seconds,
) -> Result<(Vec<Joined>, SampleClock), InputError> {
    match joining {
        Joining::None => {
            let one = |(number, codes)| {
                Joined::Shot(Shot {
                    number: Some(number),
                    codes,
                    format,
                })
            };
            Ok((shots.into_iter().enumerate().map(one).collect(), clock))
        }
        Joining::Average(None) => Ok((vec![averaged(path, &shots, format, None)?], clock)),
        Joining::Average(Some(size)) => {
            let size = usize::from(size);
            if size == 0 || !shots.len().is_multiple_of(size) {
                return Err(InputError::in_file(
                    path,
                    format!(
                        "has {} shots, which are no whole number of averages of {size}",
                        shots.len()
                    ),
                    "give --average=N with an N that divides them, or --average for all",
                ));
            }
            let averages = shots.chunks(size).enumerate();
            let averages = averages.map(|(number, shots)| averaged(path, shots, format, Some(number)));
            Ok((averages.collect::<Result<_, _>>()?, clock))
        }
        Joining::Interleave { phases, still } => interleaved(path, &shots, format, clock, (phases, still), jitter),
    }
}

/// The average of shots, as two rounds if there are two or more; of an odd number the last is left out.
fn averaged(path: &Path, shots: &[Vec<i16>], format: AdcFormat, number: Option<usize>) -> Result<Joined, InputError> {
    let half = shots.len() / 2;
    if half > usize::from(MOST_SHOTS) {
        return Err(InputError::in_file(
            path,
            format!("has {} shots, two rounds take {} at most", shots.len(), 2 * MOST_SHOTS),
            "split the file, or average fewer at a time with --average=N",
        ));
    }
    let fault = |error| fault(path, error);
    let Some((earlier, later)) = shots.split_at_checked(half).filter(|_| half > 0) else {
        let (codes, format) = average(shots, format).map_err(fault)?;
        return Ok(Joined::Shot(Shot { number, codes, format }));
    };
    let (earlier, format_of_half) = average(earlier, format).map_err(fault)?;
    let (later, _) = average(later.get(..half).unwrap_or(later), format).map_err(fault)?;
    Ok(Joined::Rounds {
        number,
        earlier,
        later,
        format: format_of_half,
    })
}

fn fault(path: &Path, error: AverageError) -> InputError {
    InputError::in_file(
        path,
        format!("its shots do not become one record ({error})"),
        "measure the shots one by one",
    )
}

/// The plain average. All shots of a file have one clock; which one does not matter here.
fn average(shots: &[Vec<i16>], format: AdcFormat) -> Result<(Vec<i16>, AdcFormat), AverageError> {
    let clock = SampleClock::new(halfpulse::Hertz::from_mhz(1.0));
    let samples = shots.first().map_or(0, Vec::len);
    let (mut sums, mut codes) = (vec![0; samples], vec![0; samples]);
    let mut averager = Averager::new(&mut sums);
    for shot in shots {
        averager.add(&Record::new(shot, format, clock))?;
    }
    let format = averager.finish(&mut codes)?.format();
    Ok((codes, format))
}

/// Rounds of delayed shots: one with some delays fired again, or several.
fn interleaved(
    path: &Path,
    shots: &[Vec<i16>],
    format: AdcFormat,
    clock: SampleClock,
    (phases, still): (u8, bool),
    jitter: Seconds,
) -> Result<(Vec<Joined>, SampleClock), InputError> {
    let round = usize::from(phases).max(1);
    let (rounds, again) = (shots.len() / round, shots.len() % round);
    let wrong = |what: String, remedy: &str| Err(InputError::in_file(path, what, remedy));
    let count = shots.len();
    if rounds == 0 {
        return wrong(
            format!("has {count} shots, {phases} delays need as many"),
            "give the number of delays that were fired, or record a whole round",
        );
    }
    if rounds > 1 && again > 0 {
        return wrong(
            format!("has {count} shots, which are no whole number of rounds of {phases} delays"),
            "give the number of delays that were fired, or cut the file to whole rounds",
        );
    }
    if rounds == 1 && again == 0 && phases > 1 && !still {
        return wrong(
            format!("has one shot of each of {phases} delays: a movement between them would not be noticed"),
            "fire the first delay again at the end, or a second round; or add --still if nothing can move",
        );
    }
    if rounds / 2 > usize::from(MOST_SHOTS) {
        return wrong(
            format!("has {rounds} rounds, two halves take {} at most", 2 * MOST_SHOTS),
            "split the file",
        );
    }
    let fault = |error| fault(path, error);
    let delayed = |number: usize| SampleClock {
        first_sample: clock.first_sample - shot_delay(clock.rate, phases, number as u8),
        ..clock
    };
    let mut dense = vec![0; shots.first().map_or(0, Vec::len) * round];
    if rounds == 1 {
        let interleaver = Interleaver::new(&mut dense, clock, phases).map_err(fault)?;
        let mut interleaver = interleaver.with_trigger_jitter(jitter);
        for (number, shot) in shots.iter().enumerate() {
            let record = Record::new(shot, format, delayed(number % round));
            if number < round {
                interleaver.add(&record).map_err(fault)?;
            } else {
                interleaver.again(&record).map_err(fault)?;
            }
        }
        let dense_clock = interleaver.clock();
        let finished = if still {
            interleaver.finish_unwatched()
        } else {
            interleaver.finish()
        };
        let joined = match finished {
            Ok(record) => Joined::Shot(Shot {
                number: None,
                codes: record.codes().to_vec(),
                format: record.format(),
            }),
            Err(error @ AverageError::Moved { .. }) => {
                let unsteady = NoReading::Unsteady {
                    echoes: 0,
                    moved: Metres::ZERO,
                };
                Joined::Refused {
                    refusal: Refusal {
                        reason: unsteady.word(),
                        detail: error.to_string(),
                    },
                    format,
                }
            }
            Err(other) => return Err(fault(other)),
        };
        return Ok((vec![joined], dense_clock));
    }
    // Of an odd number of rounds the last is left out.
    let half = rounds / 2;
    let mut of_rounds = |from: usize| -> Result<_, AverageError> {
        let mut interleaver = Interleaver::new(&mut dense, clock, phases)?;
        for number in 0..round {
            let alike: Vec<Vec<i16>> = (from..from + half).map(|k| shots[k * round + number].clone()).collect();
            let (codes, format) = average(&alike, format)?;
            interleaver.add(&Record::new(&codes, format, delayed(number)))?;
        }
        let record = interleaver.finish_unwatched()?;
        Ok((record.codes().to_vec(), record.format(), record.clock()))
    };
    let (earlier, format, dense_clock) = of_rounds(0).map_err(fault)?;
    let (later, ..) = of_rounds(half).map_err(fault)?;
    let joined = Joined::Rounds {
        number: None,
        earlier,
        later,
        format,
    };
    Ok((vec![joined], dense_clock))
}

/// Measures one record; `separate` asks whether an echo of it is two.
pub fn measure(gauge: &mut Gauge<'_>, name: &str, joined: &Joined, clock: SampleClock, separate: bool) -> Measured {
    let measured = |number, outcome, findings: &Findings, format: AdcFormat, gauge: &Gauge<'_>| Measured {
        file: name.to_string(),
        shot: number,
        span: Some(gauge.setup().span),
        outcome,
        findings: findings.clone(),
        thin_wall: None,
        full_scale: format.full_scale(),
        wall_limits: None,
        jitter: None,
    };
    match joined {
        Joined::Shot(shot) => {
            let mut found = measuring::measure(gauge, name, shot, clock);
            if separate {
                measuring::separate(gauge, shot, clock, &mut found);
            }
            found
        }
        Joined::Rounds {
            number,
            earlier,
            later,
            format,
        } => {
            let (mut earlier, mut later) = (earlier.clone(), later.clone());
            let rounds = match TwoRounds::new(&mut earlier, &mut later, *format, clock) {
                Ok(rounds) => rounds,
                // Both were made of shots of one length.
                Err(error) => {
                    let refusal = Refusal {
                        reason: "unsteady",
                        detail: error.to_string(),
                    };
                    return measured(*number, Err(refusal), &Findings::default(), *format, gauge);
                }
            };
            let outcome = gauge.measure_two_rounds(&rounds).map_err(Refusal::from);
            let mut found = measured(*number, outcome, gauge.findings(), rounds.mean().format(), gauge);
            found.wall_limits = Some(gauge.wall_limits_of(&rounds.mean()));
            if separate {
                let _ = gauge.separate(&rounds.mean());
                found.findings.separation = gauge.findings().separation;
            }
            found
        }
        Joined::Refused { refusal, format } => {
            measured(None, Err(refusal.clone()), &Findings::default(), *format, gauge)
        }
    }
}

/// Least height above the noise of an echo that tells the jitter: below it the jitter hides in the noise.
pub const STRONG: Decibels = Decibels::new(30.0);

/// What one echo of shot after shot tells of the trigger.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct TriggerJitter {
    /// The jitter.
    pub jitter: Jitter,
    /// Mean arrival of the echo.
    pub arrival: Seconds,
    /// Its height above the noise in the first shot.
    pub snr: Decibels,
    /// The echo wanders rather than scatters; `None` of too few shots.
    pub wanders: Option<bool>,
}

/// The trigger's jitter from the strongest whole echo of the first shot, which must stand 30 dB above the noise; `None`
/// without such an echo, or with fewer than two shots that have it.
pub fn trigger_jitter(
    gauge: &mut Gauge<'_>,
    shots: &[Vec<i16>],
    format: AdcFormat,
    clock: SampleClock,
) -> Option<TriggerJitter> {
    let mut arrivals = ShotArrivals::new();
    let mut first: Option<Echo> = None;
    let half_cycle = 0.5 / gauge.setup().probe.centre_frequency.get();
    for shot in shots {
        // A record without a reading may well have the echo.
        let _ = gauge.measure(&Record::new(shot, format, clock));
        let echoes = &gauge.findings().echoes;
        let echo = match first {
            None => {
                let strong = echoes.iter().filter(|echo| !echo.clipped && echo.snr >= STRONG);
                let strongest = strong.max_by(|a, b| a.amplitude.total_cmp(&b.amplitude)).copied();
                first = strongest;
                strongest?
            }
            Some(known) => {
                let distance = |echo: &Echo| (echo.arrival - known.arrival).abs();
                let nearest = echoes
                    .iter()
                    .min_by(|a, b| distance(a).get().total_cmp(&distance(b).get()));
                match nearest.filter(|echo| distance(echo).get() < half_cycle && echo.polarity == known.polarity) {
                    Some(echo) => *echo,
                    None => continue,
                }
            }
        };
        arrivals.add(echo.arrival, echo.standard_uncertainty);
    }
    Some(TriggerJitter {
        jitter: arrivals.jitter()?,
        arrival: arrivals.mean()?,
        snr: first?.snr,
        wanders: arrivals.wanders(),
    })
}
