package memory

import (
	"testing"
	"time"

	"example.com/admit/storage/storagetest"
)

type wallClock struct{}

func (wallClock) Now() time.Time { return time.Now() }

// The double is held to the same contract as the store on disk.
func TestContract(t *testing.T) {
	storagetest.Run(t, func(*testing.T) storagetest.Backend { return New(wallClock{}) })
}
