//! Words, bars and exit codes: everything between a person's terminal and the library.

mod args;
mod commands;
mod exit;
mod lines;
mod printer;
mod progress;

use asterskein::io::run_dir;
use clap::Parser;

use args::{Cli, Command};
use exit::{Exit, UsageError};
use printer::Printer;

/// Exit code of a program ended by an interrupt, as shells count it (128 + SIGINT).
const INTERRUPTED: i32 = 130;

/// Reads the command line, runs the command and says how it ended.
pub fn run() -> Exit {
    let cli = match Cli::try_parse() {
        Ok(cli) => cli,
        Err(e) => {
            // Help and version are answers, not errors.
            let exit = if e.use_stderr() {
                Exit::WrongUsage
            } else {
                Exit::Done
            };
            let _ = e.print();
            return exit;
        }
    };
    let printer = Printer::new(&cli.global);
    let handler = ctrlc::set_handler(|| {
        run_dir::remove_unfinished();
        std::process::exit(INTERRUPTED);
    });
    if let Err(e) = handler {
        printer.warning(&format!(
            "an interrupt may leave a partial directory behind: {e}"
        ));
    }
    if let Err(e) = set_threads(cli.global.threads) {
        printer.error(&e);
        return Exit::Failed;
    }
    match dispatch(cli.command, &printer, cli.global.threads) {
        Ok(exit) => exit,
        Err(e) => {
            printer.error(&e);
            if e.downcast_ref::<UsageError>().is_some() {
                Exit::WrongUsage
            } else {
                Exit::Failed
            }
        }
    }
}

fn dispatch(command: Command, printer: &Printer, threads: usize) -> anyhow::Result<Exit> {
    match command {
        Command::Audit(a) => commands::audit::run(&a, printer, threads),
        Command::Check(a) => commands::check::run(&a, printer),
        Command::Explain(a) => commands::explain::run(&a, printer),
        Command::Link(a) => commands::link::run(&a, printer, threads),
        Command::Handoff(a) => commands::handoff::run(&a, printer),
        Command::List(a) => commands::list::run(&a, printer),
        Command::Mock(a) => commands::mock::run(&a, printer),
        Command::Recover(a) => commands::recover::run(&a, printer, threads),
        Command::Score(a) => commands::score::run(&a, printer),
        Command::Report(a) => commands::report::run(&a, printer),
        Command::Completions(a) => commands::shell::completions(&a, printer),
        Command::Man => commands::shell::man(printer),
    }
}

/// Reading and writing use the global pool; 0 = one thread per processor.
fn set_threads(threads: usize) -> anyhow::Result<()> {
    rayon::ThreadPoolBuilder::new()
        .num_threads(threads)
        .build_global()
        .map_err(|e| anyhow::anyhow!("cannot start {threads} threads: {e}"))
}
