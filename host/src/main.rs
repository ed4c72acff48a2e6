//! `legwise`: finds out whether the wire is to blame. Everything happens in the library.

fn main() -> std::process::ExitCode {
    legwise::cli::run(std::env::args_os())
}
