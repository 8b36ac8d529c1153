// Length of a frame on the wire.
//
// g bits of identifier, control and checksum and 8 s bits of data are subject to stuffing: after
// five equal bits one is added, at most one in four after the first. 13 bits stand outside it,
// three of them the space between frames.
// Source: ISO 11898-1; R. Davis, A. Burns, R. Bril, J. Lukkien, "Controller area network (CAN)
// schedulability analysis: refuted, revisited and revised", Real-Time Systems 35 (2007).

#include <latewood/cpu.h>

int lw_frame_bits(int bytes, int identifier, lw_stuffing stuffing)
{
    int g = identifier == 11 ? 34 : 54;
    if (bytes < 0 || bytes > 8 || (identifier != 11 && identifier != 29))
        return -1;
    int stuffed = g + 8 * bytes;
    return stuffed + 13 + (stuffing == LW_STUFFING_NONE ? 0 : (stuffed - 1) / 4);
}
