//! The service from outside: a real server, real sockets, a real database.

mod batches;
mod harness;
mod malformed;
mod openapi;
mod service;
mod service_process;
mod store;
