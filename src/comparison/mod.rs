//! Two reports of the same batches under two revisions, side by side: verdicts,
//! suspects and values that move. Pure.
