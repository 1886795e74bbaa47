"""What a curator decides: pins, holds, and the ledger of records set aside."""
