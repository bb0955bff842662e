//! The client from outside: what it shows, what it sends, how it ends.

mod binary;
mod fake;
mod local;
mod ranking;
mod report;
mod sending;
mod support;
