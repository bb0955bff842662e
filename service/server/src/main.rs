//! The `tarehouse-server` command: telemetry, configuration, bind, run, drain.

use std::process::ExitCode;

use tarehouse_server::command;

fn main() -> ExitCode {
    let config = match command::configuration(std::env::args_os().skip(1)) {
        Ok(config) => config,
        Err(refusal) => return refusal.tell(),
    };
    command::telemetry(&config);
    let runtime = match tokio::runtime::Builder::new_multi_thread()
        .enable_all()
        .build()
    {
        Ok(runtime) => runtime,
        Err(error) => return command::failed(&error),
    };
    let outcome = runtime.block_on(async {
        let listener = tokio::net::TcpListener::bind(config.listen).await?;
        let signals = command::stop_signal()?;
        tarehouse_server::run(listener, config, signals).await
    });
    // An examination that outlived the grace time is done again after the next start.
    runtime.shutdown_background();
    match outcome {
        Ok(()) => ExitCode::SUCCESS,
        Err(error) => command::failed(&error),
    }
}
