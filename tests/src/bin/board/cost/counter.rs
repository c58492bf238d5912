//! A plugin for the emulator (QEMU 7.2, plugin interface version 1): how often each instruction is
//! executed inside marked regions. Compiled by `cargo board cost` with the host's compiler; no crate.
//!
//! `mov r10, r10` opens a region, `mov r11, r11` closes it: two instructions that do nothing and that no
//! compiler writes. At the end the file named by `out=` gets, for each region, `R number`, then
//! `P address count` for each address, and for every address seen `I address size text`.

use std::collections::BTreeMap;
use std::ffi::{CStr, c_char, c_int, c_uint, c_void};
use std::fmt::Write as _;
use std::sync::{Mutex, OnceLock};

type Id = u64;

/// A translated block; only ever seen from outside.
#[repr(C)]
pub struct Block(u8);
/// An instruction of one.
#[repr(C)]
pub struct Instruction(u8);

// Names and types as in QEMU 7.2's qemu-plugin.h.
unsafe extern "C" {
    fn qemu_plugin_register_vcpu_tb_trans_cb(id: Id, callback: extern "C" fn(Id, *mut Block));
    fn qemu_plugin_tb_n_insns(block: *const Block) -> usize;
    fn qemu_plugin_tb_get_insn(block: *const Block, place: usize) -> *mut Instruction;
    fn qemu_plugin_insn_data(instruction: *const Instruction) -> *const u8;
    fn qemu_plugin_insn_size(instruction: *const Instruction) -> usize;
    fn qemu_plugin_insn_vaddr(instruction: *const Instruction) -> u64;
    fn qemu_plugin_insn_disas(instruction: *const Instruction) -> *mut c_char;
    fn qemu_plugin_register_vcpu_insn_exec_inline(i: *mut Instruction, add: c_uint, counter: *mut c_void, by: u64);
    fn qemu_plugin_register_vcpu_insn_exec_cb(
        instruction: *mut Instruction,
        callback: extern "C" fn(c_uint, *mut c_void),
        flags: c_uint,
        data: *mut c_void,
    );
    fn qemu_plugin_register_atexit_cb(id: Id, callback: extern "C" fn(Id, *mut c_void), data: *mut c_void);
}

/// The interface this is written for; the emulator refuses another.
#[unsafe(no_mangle)]
pub static qemu_plugin_version: c_int = 1;

/// The counter of one address, which translated code adds to, and its value when the region began.
struct Slot {
    counter: *mut u64,
    at_open: u64,
    size: usize,
    text: String,
}

// SAFETY: the pointers lead to leaked counters, and the board has one processor.
unsafe impl Send for Slot {}

#[derive(Default)]
struct State {
    slots: BTreeMap<u64, Slot>,
    open: bool,
    regions: Vec<Vec<(u64, u64)>>,
}

static STATE: Mutex<Option<State>> = Mutex::new(None);
static OUT: OnceLock<String> = OnceLock::new();

const OPEN: u16 = 0x46d2;
const CLOSE: u16 = 0x46db;

extern "C" fn mark(_processor: c_uint, opens: *mut c_void) {
    let Ok(mut state) = STATE.lock() else { return };
    let state = state.get_or_insert_default();
    if opens as usize == 1 {
        for slot in state.slots.values_mut() {
            // SAFETY: a leaked counter.
            slot.at_open = unsafe { *slot.counter };
        }
        state.open = true;
    } else if state.open {
        let counts = state.slots.iter().map(|(address, slot)| {
            // SAFETY: as above.
            (*address, unsafe { *slot.counter } - slot.at_open)
        });
        state.regions.push(counts.filter(|(_, count)| *count > 0).collect());
        state.open = false;
    }
}

extern "C" fn translated(_id: Id, block: *mut Block) {
    let Ok(mut state) = STATE.lock() else { return };
    let state = state.get_or_insert_default();
    // SAFETY: the emulator lends the block and its instructions for the time of this call; counters are
    // leaked, because translated code writes to them until the end.
    unsafe {
        for place in 0..qemu_plugin_tb_n_insns(block) {
            let instruction = qemu_plugin_tb_get_insn(block, place);
            let address = qemu_plugin_insn_vaddr(instruction);
            let data = qemu_plugin_insn_data(instruction);
            let first = u16::from_le_bytes([*data, *data.add(1)]);
            let slot = state.slots.entry(address).or_insert_with(|| Slot {
                counter: Box::leak(Box::new(0)),
                at_open: 0,
                // Beside the end of a page 7.2 says 4 for an instruction of 2 bytes: the first half tells.
                size: if first >> 11 >= 0b11101 {
                    qemu_plugin_insn_size(instruction)
                } else {
                    2
                },
                text: text_of(instruction),
            });
            let counter: *mut u64 = slot.counter;
            if first == OPEN || first == CLOSE {
                let opens = usize::from(first == OPEN);
                let data = std::ptr::without_provenance_mut(opens);
                qemu_plugin_register_vcpu_insn_exec_cb(instruction, mark, 0, data);
            }
            qemu_plugin_register_vcpu_insn_exec_inline(instruction, 0, counter.cast(), 1);
        }
    }
}

/// # Safety
/// The instruction is the emulator's, for the time of the callback.
unsafe fn text_of(instruction: *const Instruction) -> String {
    // SAFETY: the emulator makes the text for the caller to keep; it stays until the end.
    unsafe {
        let text = qemu_plugin_insn_disas(instruction);
        if text.is_null() {
            String::new()
        } else {
            CStr::from_ptr(text).to_string_lossy().into_owned()
        }
    }
}

extern "C" fn at_exit(_id: Id, _data: *mut c_void) {
    let Ok(state) = STATE.lock() else { return };
    let (Some(state), Some(file)) = (state.as_ref(), OUT.get()) else {
        return;
    };
    let mut out = String::new();
    for (number, counts) in state.regions.iter().enumerate() {
        let _ = writeln!(out, "R {number}");
        for (address, count) in counts {
            let _ = writeln!(out, "P {address:x} {count}");
        }
    }
    for (address, slot) in &state.slots {
        let _ = writeln!(out, "I {address:x} {} {}", slot.size, slot.text);
    }
    if let Err(error) = std::fs::write(file, out) {
        eprintln!("counter: {file}: {error}");
    }
}

/// Called by the emulator when it loads this.
///
/// # Safety
/// By the emulator only, with its own arguments.
#[unsafe(no_mangle)]
pub unsafe extern "C" fn qemu_plugin_install(
    id: Id,
    _info: *const c_void,
    count: c_int,
    arguments: *const *const c_char,
) -> c_int {
    for place in 0..usize::try_from(count).unwrap_or(0) {
        // SAFETY: the emulator hands over so many texts.
        let argument = unsafe { CStr::from_ptr(*arguments.add(place)) }.to_string_lossy();
        if let Some(path) = argument.strip_prefix("out=") {
            let _ = OUT.set(path.to_owned());
        }
    }
    // SAFETY: as the interface asks for.
    unsafe {
        qemu_plugin_register_vcpu_tb_trans_cb(id, translated);
        qemu_plugin_register_atexit_cb(id, at_exit, std::ptr::null_mut());
    }
    0
}
