package main

import "sync"

// heapFloor is memory that is never touched, so that the system never has to give
// it. The garbage collector, which begins when as much has come as was in use,
// counts it: it would else run several times a second in a daemon that holds
// little, and hold up what rings meanwhile by milliseconds. In turn up to so much
// more is in real memory before it begins, and nothing more where there are very
// many series.
var heapFloor = sync.OnceValue(func() []byte { return make([]byte, 64<<20) })
