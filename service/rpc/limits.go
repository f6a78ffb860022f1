package rpc

import (
	"sync/atomic"
	"time"

	"google.golang.org/grpc/keepalive"

	"example.com/admit/service/inspection"
)

// Limits of what the edge takes, told in every error about them.
const (
	// MaxMessage is the largest message by the contract, bytes. One byte more is refused by its number.
	MaxMessage = 256 << 10
	// hardMessage is where the transport itself refuses a message without decoding it.
	hardMessage = 2 * MaxMessage
	// MaxHeaderList is the largest size of a call's metadata, bytes.
	MaxHeaderList = 16 << 10
	// MaxConnectionStreams is how many calls one connection may have open at once.
	MaxConnectionStreams = 256
	// MaxLimitsFile is the largest limits file, bytes.
	MaxLimitsFile = 128 << 10
	// MaxPage is the largest page of a list.
	MaxPage = 1000
	// maxStandards is the largest number of standards in a calibration: a few kinds in a few bands.
	maxStandards = 64
	// maxPageBytes ends a page of a list early, so that it stays below the 4 MiB that a caller takes by default.
	maxPageBytes = 2 << 20
	// watchPage is how many records a watcher fetches at once, which bounds what a slow one holds.
	watchPage = 100
	// callTimeout bounds a call that brings no deadline of its own and is no stream.
	callTimeout = 30 * time.Second
)

// Keepalive: a dead peer is noticed after KeepaliveTime + KeepaliveTimeout, 13 s. A client may ping every KeepaliveMinTime; its own time
// must lie above that (ClientKeepalive), or the server sends it away for pinging too often.
const (
	KeepaliveTime    = 10 * time.Second
	KeepaliveTimeout = 3 * time.Second
	KeepaliveMinTime = 5 * time.Second
)

// ClientKeepalive is what a client of this server should use.
func ClientKeepalive() keepalive.ClientParameters {
	return keepalive.ClientParameters{Time: KeepaliveTime, Timeout: KeepaliveTimeout, PermitWithoutStream: true}
}

// budget is how many sample points may be in memory at once for all calls together. What does not fit is refused as busy: the fixture
// sends it again.
type budget struct {
	most int64
	held atomic.Int64
}

func (b *budget) take(points int) error {
	if held := b.held.Add(int64(points)); held > b.most {
		b.held.Add(-int64(points))
		return inspection.Faultf(inspection.Busy, "points", "at most %d points of all inspections under way at once, %d more do not fit now", b.most, points)
	}
	return nil
}

func (b *budget) give(points int) { b.held.Add(-int64(points)) }
