//! An output pin that follows the alarm.

use embedded_hal::digital::OutputPin;

/// Drives a pin high while the alarm is on, and for a while longer so that a person can see it.
#[derive(Debug)]
pub struct AlarmPin<P> {
    pin: P,
    hold_samples: u64,
    on_until: u64,
    is_on: bool,
}

impl<P: OutputPin> AlarmPin<P> {
    /// An alarm that stays on for `hold_samples` pairs after its cause has gone.
    ///
    /// # Errors
    /// When the pin cannot be driven low.
    pub fn new(mut pin: P, hold_samples: u64) -> Result<Self, P::Error> {
        pin.set_low()?;
        Ok(Self { pin, hold_samples, on_until: 0, is_on: false })
    }

    /// Follows the state at `sample`; `is_outside` when a limit is broken or was since the last call.
    ///
    /// # Errors
    /// When the pin cannot be driven; the next call tries again.
    pub fn follow(&mut self, is_outside: bool, sample: u64) -> Result<(), P::Error> {
        if is_outside {
            self.on_until = sample.saturating_add(self.hold_samples);
        }
        let should_be_on = is_outside || sample < self.on_until;
        if should_be_on != self.is_on {
            if should_be_on {
                self.pin.set_high()?;
            } else {
                self.pin.set_low()?;
            }
            self.is_on = should_be_on;
        }
        Ok(())
    }

    /// Whether the pin is driven high.
    pub const fn is_on(&self) -> bool {
        self.is_on
    }
}

/// A pin that leads nowhere, for boards without an alarm output.
#[derive(Clone, Copy, Debug, Default)]
pub struct NoPin;

impl embedded_hal::digital::ErrorType for NoPin {
    type Error = core::convert::Infallible;
}

impl OutputPin for NoPin {
    fn set_low(&mut self) -> Result<(), Self::Error> {
        Ok(())
    }

    fn set_high(&mut self) -> Result<(), Self::Error> {
        Ok(())
    }
}
