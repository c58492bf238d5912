//! The same records through the same core, here and there: every bit must agree.

use crate::toolchain::{CORTEX_M4F, Toolchain};
use crate::{Checks, Trouble, emulator};
use halfpulse::{Gauge, Record, Scratch};
use halfpulse_mps2::canned::{CAPACITY, RECORDS};
use halfpulse_mps2::printout::{self, Sink};
use halfpulse_tests::readme;

pub fn run(checks: &mut Checks) -> Result<(), Trouble> {
    let toolchain = Toolchain::find(CORTEX_M4F)?;
    let image = toolchain.build_measure_anyhow()?;
    let board = emulator::run(&image)?;
    let host = host_printout().map_err(Trouble::Failed)?;
    say!("the board's printout:\n{board}");
    checks.check("same_bits_as_the_host", compare(&host, &board));
    checks.check(
        "one_flipped_bit_is_noticed",
        every_flipped_bit_is_noticed(&host, &board),
    );
    Ok(())
}

struct Text(String);

impl Sink for Text {
    fn text(&mut self, text: &str) {
        self.0.push_str(text);
    }
}

/// Measures the canned records here, and writes what the board writes.
fn host_printout() -> Result<String, String> {
    let mut text = Text(String::new());
    let mut scratch = Box::new(Scratch::<CAPACITY>::ZERO);
    let mut codes = [0; CAPACITY];
    for canned in &RECORDS {
        let record = Record::new(canned.copy_codes(&mut codes), canned.format, canned.clock);
        let mut gauge = Gauge::new(canned.setup, scratch.workspace()).map_err(|error| error.to_string())?;
        let outcome = gauge.measure(&record);
        printout::outcome(&mut text, canned.name, &outcome, gauge.findings());
        printout::separation(&mut text, gauge.separate(&record).as_ref());
    }
    printout::end(&mut text, u32::try_from(RECORDS.len()).unwrap_or(u32::MAX));
    Ok(text.0)
}

/// Lines that only the board can write.
fn is_cost(line: &str) -> bool {
    line.starts_with("cost ")
}

/// Compares line by line; tells how much was compared, or the first line that differs.
fn compare(host: &str, board: &str) -> Result<String, String> {
    let mut here = host.lines();
    let mut there = board.lines().filter(|line| !is_cost(line));
    let (mut name, mut lines, mut words, mut readings) = ("", 0, 0, 0);
    loop {
        match (here.next(), there.next()) {
            (None, None) => break,
            (Some(a), Some(b)) if a == b => {
                name = a.strip_prefix("record ").unwrap_or(name);
                readings += u32::from(a.starts_with("reading "));
                lines += 1;
                words += a.split(' ').filter(|word| is_number(word)).count();
            }
            (a, b) => {
                let nothing = "(nothing)";
                return Err(format!(
                    "{name}: host and board differ\nhost:  {}\nboard: {}",
                    a.unwrap_or(nothing),
                    b.unwrap_or(nothing)
                ));
            }
        }
    }
    if lines == 0 || !host.lines().last().is_some_and(|line| line.starts_with("end ")) {
        return Err("the printout has no end".to_owned());
    }
    readme::figure_of_this_compiler(
        "readings on the emulated board that differ from the host's in any bit",
        &format!("0 of {readings} readings, {words} numbers compared"),
        "cargo board run",
    );
    Ok(format!(
        "{} records, {readings} of them readings; {words} numbers agree to the last bit",
        RECORDS.len()
    ))
}

fn is_number(word: &str) -> bool {
    word.split_once('=')
        .is_some_and(|(_, digits)| digits.len() == 8 && digits.bytes().all(|b| b.is_ascii_hexdigit()))
}

/// The comparison's own test: flips the lowest bit of each number that the board wrote, one after the
/// other. Every one must be noticed.
fn every_flipped_bit_is_noticed(host: &str, board: &str) -> Result<String, String> {
    let mut tried = 0;
    for (line_number, line) in board.lines().enumerate().filter(|(_, line)| !is_cost(line)) {
        for (word_number, word) in line.split(' ').enumerate().filter(|(_, word)| is_number(word)) {
            let spoilt: Vec<String> = board
                .lines()
                .enumerate()
                .map(|(at, text)| {
                    if at == line_number {
                        flip(text, word_number)
                    } else {
                        text.to_owned()
                    }
                })
                .collect();
            if compare(host, &spoilt.join("\n")).is_ok() {
                return Err(format!(
                    "a bit of `{word}` was flipped, and the comparison did not notice:\n{line}"
                ));
            }
            tried += 1;
        }
    }
    if tried == 0 {
        return Err("the board wrote no number".to_owned());
    }
    Ok(format!("{tried} numbers, one bit flipped in each: noticed every time"))
}

/// The line with the lowest bit of one of its numbers flipped.
fn flip(line: &str, word_number: usize) -> String {
    let words: Vec<String> = line
        .split(' ')
        .enumerate()
        .map(|(at, word)| match word.split_once('=') {
            Some((key, digits)) if at == word_number => {
                format!(
                    "{key}={:08x}",
                    u32::from_str_radix(digits, 16).map_or(0, |value| value ^ 1)
                )
            }
            _ => word.to_owned(),
        })
        .collect();
    words.join(" ")
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_host_agrees_with_itself_and_costs_are_left_out() {
        let host = host_printout().unwrap();
        let with_costs = host.replace("record ", "cost measure instructions=00000001 stack=00000002\nrecord ");
        assert!(compare(&host, &with_costs).is_ok());
    }

    #[test]
    fn one_flipped_bit_is_noticed() {
        let host = host_printout().unwrap();
        every_flipped_bit_is_noticed(&host, &host).unwrap();
        assert_eq!(
            flip("health samples=0000000f noise=3f800000", 2),
            "health samples=0000000f noise=3f800001"
        );
        let why = compare(&host, &host.replacen("health samples=", "health samples=1", 1)).unwrap_err();
        assert!(why.starts_with("steel-10-mm") && why.contains("samples=1"), "{why}");
    }

    #[test]
    fn a_missing_and_an_extra_line_are_noticed() {
        let host = host_printout().unwrap();
        let lines: Vec<&str> = host.lines().collect();
        for at in 0..lines.len() {
            let mut shorter = lines.clone();
            shorter.remove(at);
            assert!(compare(&host, &shorter.join("\n")).is_err(), "line {at} is missing");
        }
        assert!(compare(&host, &format!("{host}more\n")).is_err());
        assert!(compare("", "").is_err());
    }
}
