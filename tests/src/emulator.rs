//! The emulator that plays the board: its UART on a pseudo-terminal, or on a socket with a second one
//! that resets the machine.

use std::io::{BufRead, BufReader, Read, Write};
use std::net::{TcpListener, TcpStream};
use std::path::Path;
use std::process::{Child, Command, Stdio};
use std::sync::mpsc::{Receiver, channel};
use std::time::{Duration, Instant};

/// Longest time the emulator takes to start or to answer.
const PATIENCE: Duration = Duration::from_secs(20);
/// Shortest wait for something that has not come yet.
const PAUSE: Duration = Duration::from_millis(1);

/// A running emulator; killed when dropped.
#[derive(Debug)]
pub struct Emulator {
    process: Child,
    /// Pseudo-terminal of UART 0; empty when it is on a socket.
    pub port: String,
    chunks: Receiver<Chunk>,
    /// What came before the terminal's name.
    early: Vec<Chunk>,
}

/// Bytes up to and including a line's end, and whether they came by standard output.
type Chunk = (bool, Vec<u8>);

/// The emulated machine's reset line (QEMU Machine Protocol, a JSON object per line).
#[derive(Debug)]
pub struct ResetLine {
    commands: TcpStream,
    answers: BufReader<TcpStream>,
}

impl Emulator {
    /// Boots `image` with `argument` on its command line, UART 0 on a pseudo-terminal.
    ///
    /// # Errors
    /// When the emulator is not installed or does not start.
    pub fn boot(image: &Path, argument: &Path) -> Result<Self, String> {
        let mut emulator = Self::start(image, argument, &["-serial", "pty"])?;
        // "char device redirected to /dev/pts/N (label serial0)", on either output.
        for chunk in &emulator.chunks {
            let line = String::from_utf8_lossy(&chunk.1);
            if let Some(port) = line.split_whitespace().find(|word| word.starts_with("/dev/pts/")) {
                port.clone_into(&mut emulator.port);
                return Ok(emulator);
            }
            emulator.early.push(chunk);
        }
        let said: Vec<_> = emulator.early.iter().map(|(_, bytes)| String::from_utf8_lossy(bytes)).collect();
        Err(format!("the emulator named no terminal: {}", said.concat()))
    }

    /// Boots `image` with `argument` on its command line, UART 0 on the socket returned. What the board
    /// sends before the host reads waits there.
    ///
    /// # Errors
    /// When the emulator is not installed or does not start.
    pub fn boot_on_socket(image: &Path, argument: &Path) -> Result<(Self, TcpStream, ResetLine), String> {
        let listen = || {
            TcpListener::bind("127.0.0.1:0").and_then(|listener| {
                listener.set_nonblocking(true)?;
                let address = format!("tcp:{},nodelay=on", listener.local_addr()?);
                Ok((listener, address))
            })
        };
        let (uart, uart_address) = listen().map_err(text)?;
        let (control, control_address) = listen().map_err(text)?;
        let wiring = ["-serial", &uart_address, "-qmp", &control_address];
        let mut emulator = Self::start(image, argument, &wiring)?;
        let uart = emulator.accept(&uart)?;
        let commands = emulator.accept(&control)?;
        commands.set_read_timeout(Some(PATIENCE)).map_err(text)?;
        let answers = BufReader::new(commands.try_clone().map_err(text)?);
        let mut reset_line = ResetLine { commands, answers };
        reset_line.say(r#"{"execute":"qmp_capabilities"}"#, "\"return\"")?;
        Ok((emulator, uart, reset_line))
    }

    fn start(image: &Path, argument: &Path, wiring: &[&str]) -> Result<Self, String> {
        let semihosting = format!("enable=on,target=native,arg=legwise,arg={}", argument.display());
        let mut process = Command::new("qemu-system-arm")
            .args(["-M", "mps2-an386", "-display", "none", "-monitor", "none"])
            .args(wiring)
            .args(["-semihosting-config", &semihosting, "-kernel"])
            .arg(image)
            .stdin(Stdio::null())
            .stdout(Stdio::piped())
            .stderr(Stdio::piped())
            .spawn()
            .map_err(|error| format!("could not start qemu-system-arm: {error}; try installing it"))?;
        let stdout = process.stdout.take().map(|out| Box::new(out) as Box<dyn Read + Send>);
        let stderr = process.stderr.take().map(|out| Box::new(out) as Box<dyn Read + Send>);
        let (chunks_out, chunks) = channel();
        for (output, is_stdout) in [(stdout, true), (stderr, false)] {
            let (Some(output), chunks_out) = (output, chunks_out.clone()) else { continue };
            std::thread::spawn(move || {
                // Not by `lines`: an image may write bytes that are no text.
                let (mut output, mut bytes) = (BufReader::new(output), Vec::new());
                while output.read_until(b'\n', &mut bytes).is_ok_and(|count| count > 0) {
                    if chunks_out.send((is_stdout, std::mem::take(&mut bytes))).is_err() {
                        return;
                    }
                }
            });
        }
        Ok(Self { process, port: String::new(), chunks, early: Vec::new() })
    }

    fn accept(&mut self, listener: &TcpListener) -> Result<TcpStream, String> {
        let asked = Instant::now();
        loop {
            match listener.accept() {
                Ok((stream, _)) => {
                    stream.set_nonblocking(false).map_err(text)?;
                    stream.set_nodelay(true).map_err(text)?;
                    return Ok(stream);
                }
                Err(_) if asked.elapsed() < PATIENCE && self.is_running() => std::thread::sleep(PAUSE),
                Err(error) => return Err(format!("the emulator did not connect: {error}")),
            }
        }
    }

    /// Waits for the image to end; what it wrote to the console, or how it ended otherwise.
    ///
    /// # Errors
    /// When the image ended with a failure.
    pub fn wait(&mut self) -> Result<Vec<String>, String> {
        let status = self.process.wait().map_err(|error| error.to_string())?;
        let lines =
            self.chunks.iter().map(|(_, bytes)| String::from_utf8_lossy(&bytes).trim_end().to_owned());
        let lines = lines.collect();
        if status.success() { Ok(lines) } else { Err(format!("the image ended with {status}")) }
    }

    /// Waits for the image to end; whether it ended well, and every byte it wrote to standard output.
    ///
    /// # Errors
    /// When the emulator cannot be waited for.
    pub fn wait_for_bytes(&mut self) -> Result<(bool, Vec<u8>), String> {
        let status = self.process.wait().map_err(|error| error.to_string())?;
        let chunks = std::mem::take(&mut self.early).into_iter().chain(self.chunks.iter());
        let bytes = chunks.filter(|(is_stdout, _)| *is_stdout).flat_map(|(_, bytes)| bytes).collect();
        Ok((status.success(), bytes))
    }

    /// Whether the image still runs.
    pub fn is_running(&mut self) -> bool {
        matches!(self.process.try_wait(), Ok(None))
    }

    /// Files the emulator has open; `None` where the system does not tell.
    pub fn open_files(&self) -> Option<usize> {
        Some(std::fs::read_dir(format!("/proc/{}/fd", self.process.id())).ok()?.count())
    }
}

impl ResetLine {
    /// Resets the machine; returns when it has been reset.
    ///
    /// # Errors
    /// When the emulator does not say so.
    pub fn pull(&mut self) -> Result<(), String> {
        self.say(r#"{"execute":"system_reset"}"#, "\"RESET\"")
    }

    fn say(&mut self, command: &str, awaited: &str) -> Result<(), String> {
        writeln!(self.commands, "{command}").map_err(text)?;
        let mut line = String::new();
        while !line.contains(awaited) {
            line.clear();
            if self.answers.read_line(&mut line).map_err(text)? == 0 {
                return Err("the emulator has gone".into());
            }
        }
        Ok(())
    }
}

fn text(error: impl std::fmt::Display) -> String {
    error.to_string()
}

impl Drop for Emulator {
    fn drop(&mut self) {
        let _ = self.process.kill();
        let _ = self.process.wait();
    }
}
