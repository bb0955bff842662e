//! The service from outside: every call goes through the wire, over memory or over 127.0.0.1, with an examiner of the
//! test's choice.

mod lists;
mod refusals;
mod running;
mod support;
mod uploads;
mod whole;
