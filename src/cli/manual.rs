//! `rankassay completions` and `rankassay manual`: what shells and manual readers want to know of the
//! command line, made from its own definition.

use clap::{Args, CommandFactory};
use clap_complete::Shell;

use super::output::say_and_end;
use super::report::Failure;
use super::{Arguments, Ended};

#[derive(Debug, Args)]
pub(super) struct Completions {
    /// Shell to complete in
    shell: Shell,
}

/// Writes the completion script of a shell to standard output.
pub(super) fn completions(command: &Completions) -> Ended {
    let mut script = Vec::new();
    clap_complete::generate(command.shell, &mut Arguments::command(), "rankassay", &mut script);
    say_and_end(&String::from_utf8_lossy(&script))
}

/// Writes the manual page (roff, section 1) to standard output: the program, then every command.
pub(super) fn manual() -> Ended {
    let mut whole = Arguments::command();
    whole.build();
    let mut page = Vec::new();
    clap_mangen::Man::new(whole.clone()).render(&mut page).map_err(Failure::input)?;
    let mut text = String::from_utf8_lossy(&page).into_owned();
    for command in whole.get_subcommands().filter(|command| !command.is_hide_set()) {
        let man = clap_mangen::Man::new(command.clone());
        let mut part = Vec::new();
        man.render_synopsis_section(&mut part)
            .and_then(|()| man.render_description_section(&mut part))
            .and_then(|()| man.render_options_section(&mut part))
            .map_err(Failure::input)?;
        let part = String::from_utf8_lossy(&part).replace(".SH ", ".SS ");
        text.push_str(&format!(".SH \"RANKASSAY {}\"\n{part}", command.get_name().to_uppercase()));
    }
    say_and_end(&text)
}
