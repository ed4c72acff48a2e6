//! A board on a serial port.

use legwise_protocol::command::{Command, Request};
use legwise_protocol::framing::{self, REQUEST_FRAME_BYTES};
use serialport::{SerialPort, SerialPortType};
use std::io::{self, Read, Write};
use std::time::Duration;

/// Bits per second unless the user says otherwise; a USB port ignores it.
pub const DEFAULT_BAUD: u32 = 115_200;
/// How long a read waits for the first byte.
const READ_WAIT: Duration = Duration::from_millis(100);

/// Why a port could not be used.
#[derive(Debug, thiserror::Error)]
pub enum PortError {
    /// There is no such port.
    #[error(
        "could not open {port}: there is no such port; try 'legwise ports' to see which exist, and check the cable"
    )]
    Missing {
        /// The port asked for.
        port: String,
    },
    /// The port may not be opened by this user.
    #[error(
        "could not open {port}: permission denied; try adding yourself to the group that owns it (often 'dialout' or \
         'uucp'), then log in again"
    )]
    PermissionDenied {
        /// The port asked for.
        port: String,
    },
    /// Another program holds the port.
    #[error("could not open {port}: it is in use; try closing the other program that has it open")]
    Busy {
        /// The port asked for.
        port: String,
    },
    /// It exists and is something else.
    #[error("could not open {port}: it is no serial port; try 'legwise ports' to see which are")]
    NoSerialPort {
        /// The port asked for.
        port: String,
    },
    /// Anything else while opening.
    #[error("could not open {port}: {reason}; try 'legwise ports', another cable or another socket")]
    Other {
        /// The port asked for.
        port: String,
        /// What the system said.
        reason: String,
    },
    /// The port went away.
    #[error("could not read from {port} any more: {reason}; everything received is stored; check the cable")]
    Lost {
        /// The port.
        port: String,
        /// What the system said.
        reason: String,
    },
    /// The list of ports could not be had.
    #[error("could not list the serial ports: {0}; try giving the port by name")]
    NoList(String),
}

/// An open port.
pub struct BoardPort {
    name: String,
    port: Box<dyn SerialPort>,
    commands: u32,
}

impl BoardPort {
    /// Opens a port, 8 data bits, no parity, one stop bit.
    ///
    /// # Errors
    /// When it does not exist, may not be opened, or is in use.
    pub fn open(name: &str, baud: u32) -> Result<Self, PortError> {
        let port =
            serialport::new(name, baud).timeout(READ_WAIT).open().map_err(|error| explain(name, &error))?;
        let mut port = Self { name: name.to_owned(), port, commands: 0 };
        // Whatever stood half written in the board's buffer ends here.
        port.write(&[framing::DELIMITER])?;
        Ok(port)
    }

    /// Waits up to a tenth of a second for bytes; returns how many came, 0 for none.
    ///
    /// # Errors
    /// When the port has gone.
    pub fn read(&mut self, buffer: &mut [u8]) -> Result<usize, PortError> {
        match self.port.read(buffer) {
            Ok(0) => Err(self.lost("end of stream")),
            Ok(count) => Ok(count),
            Err(error) if matches!(error.kind(), io::ErrorKind::TimedOut | io::ErrorKind::Interrupted) => {
                Ok(0)
            }
            Err(error) => Err(self.lost(&error.to_string())),
        }
    }

    /// Sends a command; returns its sequence number.
    ///
    /// # Errors
    /// When the port has gone.
    pub fn command(&mut self, command: Command) -> Result<u32, PortError> {
        self.commands += 1;
        let mut frame = [0; REQUEST_FRAME_BYTES];
        let request = Request { sequence: self.commands, command };
        let length = framing::encode_request(&request, &mut frame).unwrap_or(0);
        self.write(&frame[..length])?;
        Ok(self.commands)
    }

    fn write(&mut self, bytes: &[u8]) -> Result<(), PortError> {
        match self.port.write_all(bytes) {
            Ok(()) => Ok(()),
            // A board that does not take bytes for a while is no reason to stop listening to it.
            Err(error) if error.kind() == io::ErrorKind::TimedOut => Ok(()),
            Err(error) => Err(self.lost(&error.to_string())),
        }
    }

    /// Opens a port that went away: the one that `identity` is behind now, under whatever name; without an
    /// identity the one of the same name.
    ///
    /// # Errors
    /// When it is not there, or may not be opened.
    pub fn reopen(name: &str, identity: Option<&UsbIdentity>, baud: u32) -> Result<Self, PortError> {
        match identity {
            // The name may belong to another device by now.
            Some(identity) => {
                let port = identity.port_now().ok_or_else(|| PortError::Missing { port: name.to_owned() })?;
                Self::open(&port, baud)
            }
            None => Self::open(name, baud),
        }
    }

    /// Name the port was opened by.
    pub fn name(&self) -> &str {
        &self.name
    }

    fn lost(&self, reason: &str) -> PortError {
        PortError::Lost { port: self.name.clone(), reason: reason.to_owned() }
    }
}

/// What a USB device says of itself, by which it is found again under another port's name.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct UsbIdentity {
    vendor: u16,
    product: u16,
    serial: String,
}

impl UsbIdentity {
    /// That of the device behind `port`; `None` for other ports, and for devices without a serial number.
    pub fn of(port: &str) -> Option<Self> {
        serialport::available_ports().ok()?.into_iter().find(|one| one.port_name == port).and_then(of_usb)
    }

    /// The port it is behind now.
    fn port_now(&self) -> Option<String> {
        let ports = serialport::available_ports().ok()?;
        ports.into_iter().find(|port| of_usb(port.clone()).as_ref() == Some(self)).map(|port| port.port_name)
    }
}

fn of_usb(port: serialport::SerialPortInfo) -> Option<UsbIdentity> {
    match port.port_type {
        SerialPortType::UsbPort(usb) => {
            usb.serial_number.map(|serial| UsbIdentity { vendor: usb.vid, product: usb.pid, serial })
        }
        _ => None,
    }
}

/// A port that may have a board on it.
#[derive(Clone, Debug, serde::Serialize)]
pub struct Candidate {
    /// Name to give to `log --port`.
    pub port: String,
    /// usb, bluetooth, pci or unknown.
    pub kind: &'static str,
    /// What the device calls itself, where it says.
    pub product: Option<String>,
    /// Its serial number, where it has one.
    pub serial: Option<String>,
}

/// Serial ports of this machine.
///
/// # Errors
/// When the system does not tell.
pub fn candidates() -> Result<Vec<Candidate>, PortError> {
    let ports = serialport::available_ports().map_err(|error| PortError::NoList(error.to_string()))?;
    Ok(ports
        .into_iter()
        .map(|port| {
            let (kind, product, serial) = match port.port_type {
                SerialPortType::UsbPort(usb) => ("usb", usb.product, usb.serial_number),
                SerialPortType::BluetoothPort => ("bluetooth", None, None),
                SerialPortType::PciPort => ("pci", None, None),
                SerialPortType::Unknown => ("unknown", None, None),
            };
            Candidate { port: port.port_name, kind, product, serial }
        })
        .collect())
}

fn explain(name: &str, error: &serialport::Error) -> PortError {
    let port = name.to_owned();
    let reason = error.to_string();
    let lower = reason.to_lowercase();
    match error.kind() {
        serialport::ErrorKind::Io(io::ErrorKind::PermissionDenied) => PortError::PermissionDenied { port },
        serialport::ErrorKind::Io(io::ErrorKind::NotFound) => PortError::Missing { port },
        serialport::ErrorKind::NoDevice if lower.contains("busy") || lower.contains("lock") => {
            PortError::Busy { port }
        }
        serialport::ErrorKind::NoDevice => PortError::Missing { port },
        _ if lower.contains("permission denied") => PortError::PermissionDenied { port },
        _ if lower.contains("busy") => PortError::Busy { port },
        // What the C library says of a file without a line behind it.
        _ if lower.contains("typewriter") || lower.contains("inappropriate ioctl") => {
            PortError::NoSerialPort { port }
        }
        _ => PortError::Other { port, reason },
    }
}
