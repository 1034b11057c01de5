//! Status reporting of IEEE 488.2 (chapter 11) and SCPI-1999 (volume 1, chapter 9): registers and the error queue.

use std::collections::VecDeque;

use crate::scpi::ErrorCode;

/// Errors that the queue holds; the last place then says -350.
pub const QUEUE_LENGTH: usize = 16;

/// Bits of the standard event status register.
pub mod event {
    /// Operation complete.
    pub const OPERATION_COMPLETE: u8 = 1 << 0;
    /// A query was interrupted, unterminated or deadlocked.
    pub const QUERY_ERROR: u8 = 1 << 2;
    /// Device-dependent error.
    pub const DEVICE_ERROR: u8 = 1 << 3;
    /// A command could not be carried out.
    pub const EXECUTION_ERROR: u8 = 1 << 4;
    /// A command was not understood.
    pub const COMMAND_ERROR: u8 = 1 << 5;
    /// The instrument was switched on since the register was last read.
    pub const POWER_ON: u8 = 1 << 7;
}

/// One register tree of SCPI-1999: condition, transition filters, event, enable. Bit 15 is never used.
#[derive(Clone, Debug)]
pub struct Register {
    condition: u16,
    event: u16,
    /// Which events are summed up into the status byte.
    pub enable: u16,
    /// Which bits are noted when they rise.
    pub positive: u16,
    /// Which bits are noted when they fall.
    pub negative: u16,
}

impl Default for Register {
    fn default() -> Register {
        Register {
            condition: 0,
            event: 0,
            enable: 0,
            positive: 0x7FFF,
            negative: 0,
        }
    }
}

impl Register {
    /// The condition as last told by [`Register::update`].
    pub fn condition(&self) -> u16 {
        self.condition
    }

    /// Takes a new condition and notes the transitions that the filters let through.
    pub fn update(&mut self, condition: u16) {
        let rising = !self.condition & condition;
        let falling = self.condition & !condition;
        self.event |= (rising & self.positive) | (falling & self.negative);
        self.condition = condition;
    }

    /// The noted events; reading clears them.
    pub fn take_event(&mut self) -> u16 {
        std::mem::take(&mut self.event)
    }

    /// Whether an enabled event stands.
    pub fn summary(&self) -> bool {
        self.event & self.enable & 0x7FFF != 0
    }

    /// `STATus:PRESet`: enable and transition filters as at power on; condition and events stay.
    pub fn preset(&mut self) {
        self.enable = 0;
        self.positive = 0x7FFF;
        self.negative = 0;
    }
}

/// All status of one instrument.
#[derive(Clone, Debug)]
pub struct Status {
    event: u8,
    event_enable: u8,
    service_enable: u8,
    /// `STATus:OPERation`.
    pub operation: Register,
    /// `STATus:QUEStionable`.
    pub questionable: Register,
    errors: VecDeque<ErrorCode>,
    completion_wanted: bool,
}

impl Status {
    /// The state after power on: event bit 7 set, all else clear.
    pub fn power_on() -> Status {
        Status {
            event: event::POWER_ON,
            event_enable: 0,
            service_enable: 0,
            operation: Register::default(),
            questionable: Register::default(),
            errors: VecDeque::with_capacity(QUEUE_LENGTH),
            completion_wanted: false,
        }
    }

    /// Queues an error and sets its event bit. A full queue keeps its oldest and ends with -350.
    pub fn push_error(&mut self, code: ErrorCode) {
        self.event |= code.event_bit();
        if self.errors.len() < QUEUE_LENGTH {
            self.errors.push_back(code);
        } else if let Some(last) = self.errors.back_mut() {
            *last = ErrorCode::QUEUE_OVERFLOW;
            self.event |= event::DEVICE_ERROR;
        }
    }

    /// The oldest error, removed. `None` where there is none.
    pub fn pop_error(&mut self) -> Option<ErrorCode> {
        self.errors.pop_front()
    }

    /// Errors queued.
    pub fn error_count(&self) -> usize {
        self.errors.len()
    }

    /// `*CLS`: event registers, error queue and a waiting `*OPC` are cleared; enables stay.
    pub fn clear(&mut self) {
        self.event = 0;
        self.errors.clear();
        self.operation.take_event();
        self.questionable.take_event();
        self.completion_wanted = false;
    }

    /// `*ESR?`: the event register; reading clears it.
    pub fn take_event(&mut self) -> u8 {
        std::mem::take(&mut self.event)
    }

    /// `*ESE?`.
    pub fn event_enable(&self) -> u8 {
        self.event_enable
    }

    /// `*ESE`.
    pub fn set_event_enable(&mut self, mask: u8) {
        self.event_enable = mask;
    }

    /// `*SRE?`; bit 6 is always 0 (IEEE 488.2, 10.34).
    pub fn service_enable(&self) -> u8 {
        self.service_enable
    }

    /// `*SRE`; bit 6 is ignored.
    pub fn set_service_enable(&mut self, mask: u8) {
        self.service_enable = mask & !(1 << 6);
    }

    /// `*OPC`: bit 0 of the event register is wanted at the next completion.
    pub fn want_completion(&mut self) {
        self.completion_wanted = true;
    }

    /// `*RST` withdraws a waiting `*OPC`.
    pub fn forget_completion(&mut self) {
        self.completion_wanted = false;
    }

    /// Told when no operation is pending.
    pub fn completed(&mut self) {
        if std::mem::take(&mut self.completion_wanted) {
            self.event |= event::OPERATION_COMPLETE;
        }
    }

    /// `*STB?`. Bit 4 says whether a response is waiting ahead of this one.
    pub fn byte(&self, message_available: bool) -> u8 {
        let mut byte = 0;
        byte |= u8::from(!self.errors.is_empty()) << 2;
        byte |= u8::from(self.questionable.summary()) << 3;
        byte |= u8::from(message_available) << 4;
        byte |= u8::from(self.event & self.event_enable != 0) << 5;
        byte |= u8::from(self.operation.summary()) << 7;
        byte | (u8::from(byte & self.service_enable != 0) << 6)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn power_on_bit_is_read_once() {
        let mut status = Status::power_on();
        assert_eq!(status.take_event(), 128);
        assert_eq!(status.take_event(), 0);
    }

    #[test]
    fn full_queue_keeps_oldest_and_ends_with_overflow() {
        let mut status = Status::power_on();
        status.push_error(ErrorCode::DATA_OUT_OF_RANGE);
        for _ in 0..40 {
            status.push_error(ErrorCode::UNDEFINED_HEADER);
        }
        assert_eq!(status.error_count(), QUEUE_LENGTH);
        assert_eq!(status.pop_error(), Some(ErrorCode::DATA_OUT_OF_RANGE));
        let last = std::iter::from_fn(|| status.pop_error()).last();
        assert_eq!(last, Some(ErrorCode::QUEUE_OVERFLOW));
    }

    #[test]
    fn registers_note_rising_edges_by_default_and_falling_ones_when_asked() {
        let mut register = Register::default();
        register.update(0b10_0000);
        register.update(0);
        assert_eq!(
            (register.take_event(), register.take_event()),
            (0b10_0000, 0)
        );
        register.negative = 0b10_0000;
        register.positive = 0;
        register.update(0b10_0000);
        assert_eq!(register.take_event(), 0);
        register.update(0);
        assert_eq!(register.take_event(), 0b10_0000);
    }

    #[test]
    fn status_byte_sums_up() {
        let mut status = Status::power_on();
        assert_eq!(status.byte(false), 0);
        status.set_event_enable(128);
        assert_eq!(status.byte(false), 1 << 5);
        status.set_service_enable(0xFF);
        assert_eq!(status.service_enable(), 0xBF);
        assert_eq!(status.byte(false), (1 << 5) | (1 << 6));
        status.push_error(ErrorCode::SYNTAX_ERROR);
        status.operation.enable = 0x10;
        status.operation.update(0x10);
        assert_eq!(
            status.byte(true),
            (1 << 2) | (1 << 4) | (1 << 5) | (1 << 6) | (1 << 7)
        );
        status.clear();
        assert_eq!(status.byte(false), 0);
        status.want_completion();
        status.completed();
        assert_eq!(status.take_event(), 1);
    }
}
