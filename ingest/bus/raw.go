package bus

import "tailbell/ingest/wire"

// Raw is one message as the bus stores it.
type Raw = wire.Raw
