//! `completions` and `man`: made from the definition of the command line.

use clap::CommandFactory;

use super::super::args::Cli;
use super::super::exit::Exit;
use super::super::printer::Printer;

#[derive(Debug, clap::Args)]
pub struct Args {
    /// The shell.
    pub shell: clap_complete::Shell,
}

pub fn completions(args: &Args, printer: &Printer) -> anyhow::Result<Exit> {
    let mut command = Cli::command();
    let mut out = Vec::new();
    clap_complete::generate(args.shell, &mut command, "asterskein", &mut out);
    printer.data(&String::from_utf8(out)?);
    Ok(Exit::Done)
}

/// The man page of the program, followed by one section per command.
pub fn man(printer: &Printer) -> anyhow::Result<Exit> {
    let mut command = Cli::command();
    command.build();
    let mut out = Vec::new();
    let page = clap_mangen::Man::new(command.clone());
    page.render_title(&mut out)?;
    page.render_name_section(&mut out)?;
    page.render_synopsis_section(&mut out)?;
    page.render_description_section(&mut out)?;
    page.render_options_section(&mut out)?;
    for sub in command.get_subcommands().filter(|s| !s.is_hide_set()) {
        let name = sub.get_name().to_uppercase();
        out.extend_from_slice(format!(".SH COMMAND {name}\n").as_bytes());
        let page = clap_mangen::Man::new(sub.clone());
        let mut part = Vec::new();
        page.render_synopsis_section(&mut part)?;
        page.render_description_section(&mut part)?;
        page.render_options_section(&mut part)?;
        // Sections of a command become subsections of the page.
        let part = String::from_utf8(part)?;
        for line in part.lines() {
            let line = line
                .strip_prefix(".SH")
                .map_or_else(|| line.to_owned(), |rest| format!(".SS{rest}"));
            out.extend_from_slice(line.as_bytes());
            out.push(b'\n');
        }
    }
    page.render_version_section(&mut out)?;
    printer.data(&String::from_utf8(out)?);
    Ok(Exit::Done)
}
