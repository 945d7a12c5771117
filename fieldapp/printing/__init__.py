"""What Tapwitness puts on paper: labels; later custody records, slips and letters.

Everything here takes plain values and writes a PDF. Nothing reads the record or a clock, so the
same values give the same bytes. reportlab and qrcode are imported where they are used: a tablet
starts without them.
"""
