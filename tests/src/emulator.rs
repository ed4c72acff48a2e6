//! The emulator that plays the board: started with its UART on a pseudo-terminal.

use std::io::{BufRead, BufReader};
use std::path::Path;
use std::process::{Child, Command, Stdio};
use std::sync::mpsc::{Receiver, channel};

/// A running emulator; killed when dropped.
#[derive(Debug)]
pub struct Emulator {
    process: Child,
    /// Pseudo-terminal of UART 0.
    pub port: String,
    lines: Receiver<String>,
}

impl Emulator {
    /// Boots `image` with `argument` on its command line.
    ///
    /// # Errors
    /// When the emulator is not installed or does not start.
    pub fn boot(image: &Path, argument: &Path) -> Result<Self, String> {
        let semihosting = format!("enable=on,target=native,arg=legwise,arg={}", argument.display());
        let mut process = Command::new("qemu-system-arm")
            .args(["-M", "mps2-an386", "-display", "none", "-monitor", "none", "-serial", "pty"])
            .args(["-semihosting-config", &semihosting, "-kernel"])
            .arg(image)
            .stdin(Stdio::null())
            .stdout(Stdio::piped())
            .stderr(Stdio::piped())
            .spawn()
            .map_err(|error| format!("could not start qemu-system-arm: {error}; try installing it"))?;
        // "char device redirected to /dev/pts/N (label serial0)", on either output.
        let stdout = process.stdout.take().map(|out| Box::new(out) as Box<dyn std::io::Read + Send>);
        let stderr = process.stderr.take().map(|out| Box::new(out) as Box<dyn std::io::Read + Send>);
        let (lines_out, lines) = channel();
        for output in [stdout, stderr].into_iter().flatten() {
            let lines_out = lines_out.clone();
            std::thread::spawn(move || {
                for line in BufReader::new(output).lines().map_while(Result::ok) {
                    if lines_out.send(line).is_err() {
                        return;
                    }
                }
            });
        }
        drop(lines_out);
        let mut said = String::new();
        for line in &lines {
            if let Some(port) = line.split_whitespace().find(|word| word.starts_with("/dev/pts/")) {
                return Ok(Self { process, port: port.to_owned(), lines });
            }
            said.push_str(&line);
        }
        let _ = process.kill();
        Err(format!("the emulator named no terminal: {said}"))
    }

    /// Waits for the image to end; what it wrote to the console, or how it ended otherwise.
    ///
    /// # Errors
    /// When the image ended with a failure.
    pub fn wait(&mut self) -> Result<Vec<String>, String> {
        let status = self.process.wait().map_err(|error| error.to_string())?;
        let lines = self.lines.iter().collect();
        if status.success() { Ok(lines) } else { Err(format!("the image ended with {status}")) }
    }

    /// Whether the image still runs.
    pub fn is_running(&mut self) -> bool {
        matches!(self.process.try_wait(), Ok(None))
    }
}

impl Drop for Emulator {
    fn drop(&mut self) {
        let _ = self.process.kill();
        let _ = self.process.wait();
    }
}
