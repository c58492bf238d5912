//! From how often each instruction ran to an estimate of cycles.
//!
//! Timings of a Cortex-M4 without wait states (Arm Cortex-M4 Technical Reference Manual, tables of the
//! instruction set and of the floating point unit, from memory): a branch that is taken 2 more, a load 2 or
//! 1 behind another load or store, multiply-accumulate 2 (floating point 3), division 7 (floating point 14),
//! several registers one each. An estimate, good for comparing; real memory adds its wait states.

use std::collections::{BTreeMap, BTreeSet};

/// What the plugin wrote.
#[derive(Debug, Default)]
pub struct Counts {
    regions: Vec<BTreeMap<u64, u64>>,
    code: BTreeMap<u64, Instruction>,
    targets: BTreeSet<u64>,
}

#[derive(Clone, Debug)]
struct Instruction {
    size: u64,
    /// The mnemonic without its suffixes: `vmul` of `vmul.f32`.
    name: String,
    operands: String,
}

impl Counts {
    /// Reads the plugin's file.
    pub fn parse(text: &str) -> Result<Self, String> {
        let mut counts = Self::default();
        for line in text.lines() {
            counts
                .read_line(line)
                .ok_or_else(|| format!("the counting plugin wrote `{line}`"))?;
        }
        for instruction in counts.code.values() {
            if instruction.is_branch()
                && let Some(target) = instruction.target()
            {
                counts.targets.insert(target);
            }
        }
        Ok(counts)
    }

    fn read_line(&mut self, line: &str) -> Option<()> {
        let (kind, rest) = line.split_once(' ')?;
        match kind {
            "R" => self.regions.push(BTreeMap::new()),
            "P" => {
                let (address, count) = rest.split_once(' ')?;
                let region = self.regions.last_mut()?;
                region.insert(u64::from_str_radix(address, 16).ok()?, count.parse().ok()?);
            }
            "I" => {
                let mut parts = rest.splitn(3, ' ');
                let address = u64::from_str_radix(parts.next()?, 16).ok()?;
                let size = parts.next()?.parse().ok()?;
                let text = parts.next().unwrap_or_default();
                let (name, operands) = text.split_once(char::is_whitespace).unwrap_or((text, ""));
                let instruction = Instruction {
                    size,
                    name: name.split('.').next().unwrap_or_default().to_owned(),
                    operands: operands.trim().to_owned(),
                };
                self.code.insert(address, instruction);
            }
            _ => return None,
        }
        Some(())
    }

    /// How many regions there were.
    pub fn regions(&self) -> usize {
        self.regions.len()
    }

    /// Executed instructions of a region.
    pub fn instructions(&self, region: usize) -> u64 {
        self.regions.get(region).map_or(0, |counts| counts.values().sum())
    }

    /// Estimated cycles of a region.
    pub fn cycles(&self, region: usize) -> u64 {
        let Some(counts) = self.regions.get(region) else {
            return 0;
        };
        counts
            .iter()
            .map(|(&address, &count)| self.cost(address, count, counts))
            .sum()
    }

    fn cost(&self, address: u64, count: u64, counts: &BTreeMap<u64, u64>) -> u64 {
        let Some(instruction) = self.code.get(&address) else {
            return count;
        };
        let name = instruction.name.as_str();
        let starts = |prefixes: &[&str]| prefixes.iter().any(|prefix| name.starts_with(prefix));
        let registers = instruction.registers();
        let next = address + instruction.size;
        if starts(&["vldm", "vstm", "vpush", "vpop", "push", "stm"]) {
            return count * (1 + registers);
        }
        if starts(&["pop", "ldm"]) {
            let jumps = if instruction.operands.contains("pc") { 2 } else { 0 };
            return count * (1 + registers + jumps);
        }
        if starts(&["ldrd", "strd"]) {
            return count * 3;
        }
        if starts(&["ldr", "vldr"]) {
            let behind = self.before(address).is_some_and(Instruction::is_memory);
            let jumps = if instruction.operands.starts_with("pc") { 2 } else { 0 };
            return count * (if behind { 1 } else { 2 } + jumps);
        }
        if matches!(name, "b" | "bl" | "bx" | "blx") || starts(&["tbb", "tbh"]) {
            return count * 3;
        }
        if instruction.is_branch() {
            // What did not go on to the next instruction jumped. Where others jump to that one too, this
            // takes some jumps for none.
            let went_on = counts.get(&next).copied().unwrap_or(0);
            let jumped = if self.targets.contains(&next) {
                count.saturating_sub(went_on).min(count)
            } else {
                count.saturating_sub(went_on)
            };
            return count + 2 * jumped;
        }
        let each = match name {
            "udiv" | "sdiv" => 7,
            "mla" | "mls" => 2,
            _ if starts(&["vmla", "vmls", "vnml", "vfma", "vfms", "vfnm"]) => 3,
            _ if starts(&["vdiv", "vsqrt"]) => 14,
            _ if starts(&["vadd", "vsub", "vmul", "vnmul"]) && self.is_used_next(instruction, next) => 2,
            _ => 1,
        };
        count * each
    }

    fn before(&self, address: u64) -> Option<&Instruction> {
        let (at, instruction) = self.code.range(..address).next_back()?;
        (at + instruction.size == address).then_some(instruction)
    }

    /// Does the next instruction of the floating point unit need what this one computes?
    fn is_used_next(&self, instruction: &Instruction, next: u64) -> bool {
        let result = instruction.operands.split(',').next().unwrap_or_default().trim();
        let Some(next) = self.code.get(&next).filter(|next| next.name.starts_with('v')) else {
            return false;
        };
        let reads_all = ["vmla", "vfma", "vstr", "vcmp"]
            .iter()
            .any(|name| next.name.starts_with(name));
        next.operands
            .split([',', ' '])
            .map(str::trim)
            .filter(|word| !word.is_empty())
            .skip(if reads_all { 0 } else { 1 })
            .any(|word| word == result)
    }
}

impl Instruction {
    fn is_memory(&self) -> bool {
        ["ldr", "str", "vldr", "vstr"]
            .iter()
            .any(|name| self.name.starts_with(name))
    }

    /// A branch with a condition or without.
    fn is_branch(&self) -> bool {
        const CONDITIONS: [&str; 16] = [
            "eq", "ne", "hs", "lo", "cs", "cc", "mi", "pl", "vs", "vc", "hi", "ls", "ge", "lt", "gt", "le",
        ];
        let name = self.name.as_str();
        matches!(name, "b" | "bl" | "cbz" | "cbnz")
            || name.strip_prefix('b').is_some_and(|rest| CONDITIONS.contains(&rest))
    }

    /// Where a branch leads.
    fn target(&self) -> Option<u64> {
        let last = self.operands.rsplit(',').next()?.trim();
        u64::from_str_radix(last.strip_prefix("#0x")?, 16).ok()
    }

    /// Words that a list of registers stands for.
    fn registers(&self) -> u64 {
        let list = self.operands.split_once('{').and_then(|(_, rest)| rest.split_once('}'));
        let Some((list, _)) = list else { return 1 };
        let mut words = 0;
        for part in list.split(',').map(str::trim) {
            let number = |register: &str| register.get(1..).and_then(|digits| digits.parse::<u64>().ok());
            let count = match part.split_once('-') {
                Some((first, last)) => match (number(first.trim()), number(last.trim())) {
                    (Some(first), Some(last)) => last.saturating_sub(first) + 1,
                    _ => 1,
                },
                None => 1,
            };
            // A double register is two words.
            words += if part.starts_with('d') { 2 * count } else { count };
        }
        words
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// A loop of ten rounds: 9 taken branches, each load behind none.
    const LOOP: &str = "R 0\nP 100 10\nP 102 10\nP 106 10\nP 108 1\n\
        I 100 2 ldr r0, [r1, #4]\nI 102 4 vmul.f32 s0, s1, s2\nI 106 2 bne #0x100\nI 108 2 pop {r4, r5, pc}\n";

    #[test]
    fn a_loop_costs_what_the_manual_says() {
        let counts = Counts::parse(LOOP).unwrap();
        assert_eq!((counts.regions(), counts.instructions(0)), (1, 31));
        // 10 loads of 2, 10 products of 1, 10 branches and 9 jumps of 2, a pop of 3 with a jump.
        assert_eq!(counts.cycles(0), 20 + 10 + 10 + 18 + 6);
        assert_eq!((counts.instructions(1), counts.cycles(1)), (0, 0));
    }

    #[test]
    fn a_result_that_is_needed_at_once_costs_a_cycle() {
        let pair = |second: &str| {
            let text = format!("R 0\nP 0 1\nP 4 1\nI 0 4 vadd.f32 s0, s1, s2\nI 4 4 {second}\n");
            Counts::parse(&text).unwrap().cycles(0)
        };
        assert_eq!(pair("vmul.f32 s3, s0, s4"), 3);
        assert_eq!(pair("vmul.f32 s0, s3, s4"), 2);
        assert_eq!(pair("vstr s0, [r0]"), 3);
        assert_eq!(pair("vdiv.f32 s3, s4, s5"), 15);
    }

    #[test]
    fn lists_of_registers_are_counted_in_words() {
        let registers = |operands: &str| {
            Instruction {
                size: 4,
                name: String::new(),
                operands: operands.to_owned(),
            }
            .registers()
        };
        assert_eq!(registers("{r4, r5, r7, lr}"), 4);
        assert_eq!(registers("sp!, {r4-r11}"), 8);
        assert_eq!(registers("{d8, d9}"), 4);
        assert_eq!(registers("r0, [r1]"), 1);
    }

    #[test]
    fn what_no_plugin_writes_is_an_error() {
        for text in ["X 1", "P 0 1", "R 0\nP zz 1", "I 0", "nothing"] {
            assert!(Counts::parse(text).is_err(), "{text}");
        }
    }
}
