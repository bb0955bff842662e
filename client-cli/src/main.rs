//! The `tarehouse` command: arguments, runtime, Ctrl-C, exit code.

use std::process::ExitCode;

use clap::Parser as _;
use tarehouse_client::arguments::Arguments;
use tarehouse_client::console::Console;
use tarehouse_client::exit::Exit;
use tarehouse_client::interrupt;

fn main() -> ExitCode {
    let arguments = Arguments::parse();
    let mut console = Console::of_process();
    let runtime = match tokio::runtime::Builder::new_multi_thread()
        .enable_all()
        .build()
    {
        Ok(runtime) => runtime,
        Err(error) => {
            console.message(&format!("error: the program could not start: {error}"));
            return ExitCode::from(Exit::Internal.code());
        }
    };
    let exit = runtime.block_on(async {
        let interrupt = interrupt::on_ctrl_c();
        tarehouse_client::run(arguments, &mut console, interrupt).await
    });
    // An examination that was interrupted still runs on its thread: do not wait for it.
    runtime.shutdown_background();
    ExitCode::from(exit.code())
}
