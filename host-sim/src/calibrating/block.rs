//! One block: which of its echoes is the first back wall, and when it came.

use crate::input_error::InputError;
use crate::measuring::{self, Shot};
use crate::record_file::RecordFile;
use halfpulse::echo::Polarity;
use halfpulse::wall::thickness::Timed;
use halfpulse::wall::uncertainty::Source;
use halfpulse::{Echo, EchoRole, Gauge, GaugeSetup, Metres, Record, SampleClock, Seconds, Span};
use std::path::{Path, PathBuf};

/// A block of known thickness with its record.
pub struct BlockRecord {
    /// Thickness as it was typed.
    pub thickness_mm: f64,
    /// Thickness.
    pub thickness: Metres,
    /// Its standard uncertainty (k = 1).
    pub thickness_uncertainty: Metres,
    /// The record's file.
    pub path: PathBuf,
    /// The average of its shots.
    pub average: Shot,
    /// Its shots.
    pub shots: Vec<Shot>,
    /// When the samples were taken.
    pub clock: SampleClock,
}

impl BlockRecord {
    /// A block of a thickness and its standard uncertainty (k = 1), with the shots that were taken on it.
    ///
    /// # Errors
    /// More shots than one average takes.
    pub fn new(
        path: &Path,
        (thickness_mm, uncertainty_mm): (f64, f64),
        file: RecordFile,
        clock: SampleClock,
    ) -> Result<Self, InputError> {
        Ok(Self {
            thickness_mm,
            thickness: Metres::new((thickness_mm * 1e-3) as f32),
            thickness_uncertainty: Metres::new((uncertainty_mm * 1e-3) as f32),
            path: path.to_path_buf(),
            average: measuring::averaged(path, &file)?,
            shots: measuring::shots(file),
            clock,
        })
    }
}

/// What a block's echoes say.
#[derive(Clone, Debug)]
pub struct BlockTimes {
    /// The first back wall in the averaged record.
    pub back_wall: Echo,
    /// Its arrival, with the larger of noise and scatter as its uncertainty.
    pub first_back_wall: Timed,
    /// How much later than straight the first back wall comes, as the set-up has it.
    pub deviation: Seconds,
    /// The interface echo, where the span needs it.
    pub interface: Option<Timed>,
    /// The period of the back walls, where there is one.
    pub period: Option<Timed>,
    /// What the phase between echoes may have done to the period (k = 1); 0 without one.
    pub period_phase: Seconds,
    /// All back walls of the averaged record have the pulse's own sign.
    pub upright: bool,
    /// The nearest echoes before and after the first back wall.
    pub neighbours: (Option<Seconds>, Option<Seconds>),
    /// The first back wall in each shot that shows it, with the shot's number.
    pub of_shots: Vec<(usize, Echo)>,
}

impl BlockTimes {
    /// The time that a zero refers to: the first back wall, after the interface if there is one, as if its way were
    /// straight.
    #[must_use]
    pub fn first(&self) -> Timed {
        let mut first = self.first_back_wall;
        first.time = first.time - self.deviation;
        match self.interface {
            None => first,
            Some(interface) => Timed::new(
                first.time - interface.time,
                Seconds::new(
                    first
                        .standard_uncertainty
                        .get()
                        .hypot(interface.standard_uncertainty.get()),
                ),
            ),
        }
    }
}

/// How far a zero that is not learned yet may lie from the set-up's: wear plate and cable (common practice).
const UNKNOWN_ZERO: Seconds = Seconds::from_us(1.0);
/// How far the velocity may differ from the set-up's before it is learned.
const UNKNOWN_VELOCITY: f32 = 0.1;

/// Measures one block's average, and its shots for their scatter.
///
/// # Errors
/// No back wall where the thickness promises one; a clipped one; no interface echo or no period where
/// they are needed.
pub fn measure(gauge: &mut Gauge<'_>, block: &BlockRecord, needs_period: bool) -> Result<BlockTimes, InputError> {
    let setup = *gauge.setup();
    let (echoes, outcome) = look(gauge, block, &block.average);
    let found = find(&echoes, block, &setup);
    let Some((back_wall, interface)) = found else {
        let why = match outcome {
            Err(why) => why,
            Ok(_) => "its echoes lie elsewhere".to_string(),
        };
        return Err(InputError::in_file(
            &block.path,
            format!("no back wall near the time of {} mm: {why}", block.thickness_mm),
            "check the block's thickness, the velocity and the window",
        ));
    };
    for (echo, name) in [(Some(back_wall), "back wall"), (interface, "interface echo")] {
        if echo.is_some_and(|echo| echo.clipped) {
            return Err(InputError::in_file(
                &block.path,
                format!("the {name} is clipped"),
                "lower the gain and record the block again",
            ));
        }
    }
    // Where more than one back wall is seen, their period says whether the block is the one that was named;
    // a zero learned on the wrong block would look like any other.
    let period = match period_of(gauge, block, &setup, outcome) {
        Ok(period) => Some(period),
        Err(why) if needs_period => {
            return Err(InputError::in_file(
                &block.path,
                format!("no period of back walls: {why}"),
                "record for longer, or raise the gain",
            ));
        }
        Err(_) => None,
    };
    let period_phase = period.map_or(Seconds::ZERO, |trip| trip.phase);
    let period = period.map(|trip| trip.timed);
    let upright = echoes
        .iter()
        .filter(|echo| matches!(echo.role, EchoRole::BackWall(_)))
        .chain([&back_wall])
        .all(|echo| echo.polarity == Polarity::Positive);
    let expected = expected_trip(block, &setup);
    if let Some(period) = period
        && (period.time / expected - 1.0).abs() > UNKNOWN_VELOCITY
    {
        return Err(InputError::in_file(
            &block.path,
            format!(
                "its back walls are {} apart, {} mm promise {expected}",
                period.time, block.thickness_mm
            ),
            "check the block's thickness and the set-up's velocity",
        ));
    }
    let position = echoes
        .iter()
        .position(|echo| echo.arrival == back_wall.arrival)
        .unwrap_or(0);
    let neighbours = (
        position
            .checked_sub(1)
            .and_then(|i| echoes.get(i))
            .map(|echo| echo.arrival),
        echoes.get(position + 1).map(|echo| echo.arrival),
    );
    let scatter = scatter(gauge, block, &setup, (&back_wall, interface.as_ref(), period));
    Ok(BlockTimes {
        first_back_wall: timed(&back_wall, scatter.back_wall),
        deviation: gauge.path_deviation(block.thickness),
        interface: interface.map(|echo| timed(&echo, scatter.interface)),
        period: period.map(|period| Timed::new(period.time, period.standard_uncertainty.longer(scatter.period))),
        period_phase,
        upright,
        back_wall,
        neighbours,
        of_shots: scatter.of_shots,
    })
}

fn expected_trip(block: &BlockRecord, setup: &GaugeSetup) -> Seconds {
    block.thickness * 2.0 / setup.material.velocity
}

fn timed(echo: &Echo, scatter: Seconds) -> Timed {
    Timed::new(echo.arrival, echo.standard_uncertainty.longer(scatter))
}

/// A round trip, and what the phase between echoes may have done to it (k = 1).
#[derive(Clone, Copy)]
struct Trip {
    timed: Timed,
    phase: Seconds,
}

/// Echoes of one shot, and its round trip: the reading times 2 / c, or why there is none.
fn look(gauge: &mut Gauge<'_>, block: &BlockRecord, shot: &Shot) -> (Vec<Echo>, Result<Trip, String>) {
    let record = Record::new(&shot.codes, shot.format, block.clock);
    let velocity = gauge.setup().material.velocity;
    let outcome = gauge.measure(&record);
    let period = match outcome {
        Ok(reading) => {
            let of = |source: Source| {
                let term = reading.budget.terms().iter().find(|term| term.source == source);
                term.map_or(Metres::ZERO, |term| term.standard_uncertainty) * 2.0 / velocity
            };
            Ok(Trip {
                timed: Timed::new(reading.thickness * 2.0 / velocity, of(Source::Timing)),
                phase: of(Source::Phase),
            })
        }
        Err(why) => Err(why.to_string()),
    };
    (gauge.findings().echoes.iter().copied().collect(), period)
}

/// The period of the back walls, whatever the span.
fn period_of(
    gauge: &mut Gauge<'_>,
    block: &BlockRecord,
    setup: &GaugeSetup,
    outcome: Result<Trip, String>,
) -> Result<Trip, String> {
    if setup.span == Span::BackWallToBackWall {
        return outcome;
    }
    let between = GaugeSetup {
        span: Span::BackWallToBackWall,
        ..*setup
    };
    gauge.change_setup(between).map_err(|error| error.to_string())?;
    let (_, period) = look(gauge, block, &block.average);
    gauge.change_setup(*setup).map_err(|error| error.to_string())?;
    period
}

/// The first back wall, and the interface echo where the span needs one.
///
/// The zero is not known yet, so the first back wall is the echo that the gauge calls so if its place
/// fits the thickness, else the strongest echo that does.
fn find(echoes: &[Echo], block: &BlockRecord, setup: &GaugeSetup) -> Option<(Echo, Option<Echo>)> {
    let interface = echoes.iter().find(|echo| echo.role == EchoRole::Interface).copied();
    let needs_interface = setup.span == Span::InterfaceToBackWall;
    if needs_interface && interface.is_none() {
        return None;
    }
    let trip = expected_trip(block, setup);
    let (start, unknown) = match interface {
        Some(interface) => (interface.arrival, Seconds::ZERO),
        None => (setup.zero.offset, UNKNOWN_ZERO),
    };
    // One cycle more, because the pulse at hand may be only modelled.
    let tolerance = trip * UNKNOWN_VELOCITY + unknown + setup.probe.centre_frequency.period();
    let fits = |echo: &&Echo| {
        echo.role != EchoRole::Interface
            && echo.role != EchoRole::TransmissionPulse
            && (echo.arrival - start - trip).abs() <= tolerance
    };
    let named = echoes
        .iter()
        .filter(fits)
        .find(|echo| echo.role == EchoRole::BackWall(1));
    let strongest = || {
        echoes
            .iter()
            .filter(fits)
            .max_by(|a, b| a.amplitude.total_cmp(&b.amplitude))
    };
    let back_wall = named.or_else(strongest)?;
    Some((*back_wall, interface.filter(|_| needs_interface)))
}

/// Standard uncertainties of the mean from the scatter of the shots; zero with fewer than three. And the first back wall
/// of each.
#[derive(Clone, Default)]
struct Scatter {
    back_wall: Seconds,
    interface: Seconds,
    period: Seconds,
    of_shots: Vec<(usize, Echo)>,
}

fn scatter(
    gauge: &mut Gauge<'_>,
    block: &BlockRecord,
    setup: &GaugeSetup,
    (back_wall, interface, period): (&Echo, Option<&Echo>, Option<Timed>),
) -> Scatter {
    let half_cycle = setup.probe.centre_frequency.period() * 0.5;
    let near = |echoes: &[Echo], of: &Echo| {
        let distance = |echo: &Echo| echo.arrival - of.arrival;
        let nearest = echoes
            .iter()
            .min_by(|a, b| distance(a).abs().get().total_cmp(&distance(b).abs().get()))?;
        (distance(nearest).abs() < half_cycle).then_some((*nearest, distance(nearest)))
    };
    let (mut of_shots, mut walls, mut interfaces, mut periods) = (Vec::new(), Vec::new(), Vec::new(), Vec::new());
    for (number, shot) in block.shots.iter().enumerate() {
        let (echoes, outcome) = look(gauge, block, shot);
        if let Some((echo, distance)) = near(&echoes, back_wall) {
            walls.push(distance);
            of_shots.push((number, echo));
        }
        interfaces.extend(interface.and_then(|of| near(&echoes, of)).map(|(_, distance)| distance));
        if let (Some(of), Ok(this), Span::BackWallToBackWall) = (period, outcome, setup.span) {
            periods.extend(Some(this.timed.time - of.time).filter(|d| d.abs() < half_cycle));
        }
    }
    Scatter {
        back_wall: of_the_mean(&walls),
        interface: of_the_mean(&interfaces),
        period: of_the_mean(&periods),
        of_shots,
    }
}

/// Standard deviation of the mean (JCGM 100:2008, 4.2.3); zero of fewer than three.
fn of_the_mean(differences: &[Seconds]) -> Seconds {
    let count = differences.len() as f64;
    if differences.len() < 3 {
        return Seconds::ZERO;
    }
    let mean = differences.iter().map(|d| f64::from(d.get())).sum::<f64>() / count;
    let squares: f64 = differences
        .iter()
        .map(|d| f64::from(d.get()) - mean)
        .map(|off| off * off)
        .sum();
    Seconds::new((squares / (count - 1.0) / count).sqrt() as f32)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn val_standard_deviation_of_the_mean() {
        // 1, 2, 3, 4 ns: variance 5/3 ns², of the mean 5/12 ns² (by hand).
        let values: Vec<Seconds> = (1..=4).map(|ns| Seconds::from_ns(ns as f32)).collect();
        assert!((of_the_mean(&values).as_ns() - (5.0f32 / 12.0).sqrt()).abs() < 1e-5);
        assert_eq!(of_the_mean(&values[..2]), Seconds::ZERO);
    }
}
