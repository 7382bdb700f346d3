pub mod draft;
