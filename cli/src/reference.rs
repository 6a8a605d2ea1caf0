//! `hushwatch reference`: marks an interval of the log as before or after the fix.

use std::io::Write;
use std::process::ExitCode;

use clap::{Args, ValueEnum};
use hushwatch_config::site::Site;
use hushwatch_control::{Client, LaidReference, MarkReference, Reply, Request, When};
use hushwatch_quantity::Time;
use hushwatch_report::{Cell, table};

use crate::context::{Context, print_json, system_now, width};
use crate::failure::{Failure, Outcome};
use crate::times::{span, time};

/// Marks an interval of the log as a reference.
#[derive(Args)]
pub(crate) struct Arguments {
    /// The tag of the cable
    cable: String,
    /// Was the choke off or on?
    #[arg(value_enum)]
    kind: Kind,
    /// The last so long, up to the newest level: `24h`, `3 days`
    #[arg(long, value_name = "SPAN", conflicts_with_all = ["from", "to"], required_unless_present = "from")]
    last: Option<String>,
    /// From this time on ...
    #[arg(long, value_name = "TIME", requires = "to")]
    from: Option<String>,
    /// ... up to, not including, this time
    #[arg(long, value_name = "TIME", requires = "from")]
    to: Option<String>,
    /// Why; needed for an `after` that is not the first one
    #[arg(long, default_value = "")]
    note: String,
    /// Who you are [default: the user of this process]
    #[arg(long)]
    who: Option<String>,
}

#[derive(Clone, Copy, ValueEnum)]
enum Kind {
    /// Without the choke
    Before,
    /// With the choke: what is to be held from now on
    After,
}

/// Asks the service to lay the reference, and tells what was laid.
pub(crate) fn run(context: &Context, arguments: &Arguments) -> Outcome {
    let site = context.site()?;
    let request = Request::Reference(MarkReference {
        cable: arguments.cable.clone(),
        kind: match arguments.kind {
            Kind::Before => String::from("before"),
            Kind::After => String::from("after"),
        },
        when: when(&site, arguments)?,
        who: arguments.who.clone(),
        note: arguments.note.clone(),
    });
    let mut service = Client::connect(&site.control_socket)?;
    let Reply::References { laid, left_out } = service.ask(&request)? else {
        return Err(Failure::could_not("the service gave another answer than references"));
    };
    if context.json {
        print_json(&serde_json::json!({ "laid": laid, "left_out": left_out }))?;
    } else {
        tell(&laid, &left_out)?;
    }
    Ok(ExitCode::SUCCESS)
}

fn when(site: &Site, arguments: &Arguments) -> Result<When, Failure> {
    let absolute = |text: &str| time(text, system_now(), site).map(Time::as_micros);
    match (&arguments.last, &arguments.from, &arguments.to) {
        (Some(last), ..) => Ok(When::Last(span(last)?.as_micros())),
        (None, Some(from), Some(to)) => Ok(When::Between(absolute(from)?, absolute(to)?)),
        _ => Err(Failure::wrong_call("say which interval: --last SPAN, or --from TIME --to TIME")),
    }
}

fn tell(laid: &[LaidReference], left_out: &[String]) -> Result<(), Failure> {
    let row = |one: &LaidReference| {
        vec![
            Cell::new(&one.band),
            Cell::new(&one.state),
            Cell::number(format!("{:.2} {}", one.level_db, one.unit)),
            Cell::number(format!("{:.2} dB", 1.96 * one.standard_error_db)),
            Cell::number(format!("{} (worth {:.0})", one.blocks, one.effective_blocks)),
            Cell::new(if one.provisional { "provisional: under a day" } else { "" }),
            Cell::number(one.max_rise_db.map_or_else(|| String::from("not charted"), |rise| format!("{rise:.1} dB"))),
        ]
    };
    let rows: Vec<Vec<Cell>> = laid.iter().map(row).collect();
    let mut out = anstream::stdout().lock();
    let header = ["band", "state", "level", "+- 95 %", "blocks", "", "alarm at a rise of"];
    out.write_all(table(&header, &rows, width()).as_bytes())?;
    for one in left_out {
        writeln!(out, "left out: {one}")?;
    }
    Ok(())
}
