//! The commands that only show or write what is there: `report`, `receivers`, `ports`, `export`.

use super::failure::Exit;
use super::{ExportArguments, ReceiversArguments, ReportArguments, calibration, terminal};
use crate::log::Log;
use crate::report::{Options, Report};
use crate::spectrum::conversion::ConversionFloor;
use crate::watching::Watching;
use crate::{export, port, receiver_table, report};

pub(super) fn report(arguments: &ReportArguments) -> anyhow::Result<Exit> {
    let board = arguments.board.read()?;
    let log = Log::open(&arguments.log)?;
    let floor = calibration::floor_for(&log, board.as_ref())?;
    print_report(&log, floor, arguments.json.json, arguments.verdict_code)
}

/// Prints the report of a log; `floor` is the board's own conversion, where it is known.
pub(super) fn print_report(
    log: &Log,
    floor: Option<ConversionFloor>,
    is_json: bool,
    is_verdict_code: bool,
) -> anyhow::Result<Exit> {
    let report = Report::from_log(log, &Options { floor, ..Options::default() })?;
    let text = if is_json {
        report::json::render(&report)?
    } else {
        report::text::render(&report, terminal::style())
    };
    terminal::print(&text)?;
    Ok(Exit::of_verdict(report.verdict, is_verdict_code))
}

pub(super) fn receivers(arguments: &ReceiversArguments) -> anyhow::Result<Exit> {
    let receiver = match arguments.name.as_deref().map(|name| Watching::named(Some(name))).transpose()? {
        Some(Watching::Receiver(receiver)) => Some(receiver),
        _ => None,
    };
    let text = if arguments.json.json {
        receiver_table::json(receiver)?
    } else {
        receiver_table::text(receiver, terminal::style())
    };
    terminal::print(&text)?;
    Ok(Exit::Done)
}

pub(super) fn ports(is_json: bool) -> anyhow::Result<Exit> {
    let candidates = port::candidates()?;
    if is_json {
        terminal::print(&serde_json::to_string_pretty(&serde_json::json!({ "ports": candidates }))?)?;
        return Ok(Exit::Done);
    }
    if candidates.is_empty() {
        terminal::print("no serial ports found; plug the board in, or check its cable, and try again")?;
    }
    for candidate in candidates {
        let product = candidate.product.unwrap_or_default();
        let serial = candidate.serial.map(|serial| format!("serial {serial}")).unwrap_or_default();
        let line = format!("{:<24} {:<9} {product} {serial}", candidate.port, candidate.kind);
        terminal::print(line.trim_end())?;
    }
    Ok(Exit::Done)
}

pub(super) fn export(arguments: &ExportArguments) -> anyhow::Result<Exit> {
    let log = Log::open(&arguments.log)?;
    let written = export::write_tables(&log, &arguments.output, arguments.tables.as_deref())?;
    for path in written {
        terminal::print(&path.display().to_string())?;
    }
    Ok(Exit::Done)
}
