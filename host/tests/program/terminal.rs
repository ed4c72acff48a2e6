//! Pseudo terminals: the far end of a serial port, or a screen.

use crate::room::hold_starting;
use serialport::TTYPort;

/// Both ends and the name of the second. The second stays open so that the first never hangs up by
/// itself; dropping the first hangs up on whoever has opened the name.
pub fn pair() -> (TTYPort, TTYPort, String) {
    let _guard = hold_starting();
    let (master, slave) = TTYPort::pair().unwrap();
    let name = serialport::SerialPort::name(&slave).unwrap();
    // Clones, unlike the originals, are not inherited by the programs started.
    (master.try_clone_native().unwrap(), slave.try_clone_native().unwrap(), name)
}
