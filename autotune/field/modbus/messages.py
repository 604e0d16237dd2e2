"""Planned requests as Modbus messages, and as words for a person."""

from pymodbus.pdu import ModbusPDU
from pymodbus.pdu.bit_message import (
    ReadCoilsRequest,
    ReadDiscreteInputsRequest,
    WriteMultipleCoilsRequest,
    WriteSingleCoilRequest,
)
from pymodbus.pdu.register_message import (
    MaskWriteRegisterRequest,
    ReadHoldingRegistersRequest,
    ReadInputRegistersRequest,
    WriteMultipleRegistersRequest,
    WriteSingleRegisterRequest,
)

from autotune.config.types import RegisterTable
from autotune.field.modbus.requests import MaskRegister, ReadRequest, WriteCoils, WriteRegisters, WriteRequest

_READS: dict[RegisterTable, type[ModbusPDU]] = {
    RegisterTable.COIL: ReadCoilsRequest,
    RegisterTable.DISCRETE: ReadDiscreteInputsRequest,
    RegisterTable.HOLDING: ReadHoldingRegistersRequest,
    RegisterTable.INPUT: ReadInputRegistersRequest,
}


def to_read_pdu(request: ReadRequest) -> ModbusPDU:
    """Function 1, 2, 3 or 4, after the table."""
    return _READS[request.table](address=request.first, count=request.count)


def to_write_pdu(request: WriteRequest) -> ModbusPDU:
    """Function 5 or 15 for coils, 6 or 16 for registers, 22 for a bit of a register; the short form for one."""
    if isinstance(request, MaskRegister):
        pdu: ModbusPDU = MaskWriteRegisterRequest(
            address=request.first, and_mask=request.and_mask, or_mask=request.or_mask
        )
        return pdu
    if isinstance(request, WriteCoils):
        if len(request.bits) == 1:
            return WriteSingleCoilRequest(address=request.first, bits=list(request.bits))
        return WriteMultipleCoilsRequest(address=request.first, bits=list(request.bits))
    if len(request.words) == 1:
        return WriteSingleRegisterRequest(address=request.first, registers=list(request.words))
    return WriteMultipleRegistersRequest(address=request.first, registers=list(request.words))


def to_place(request: ReadRequest | WriteRequest) -> str:
    """Tags and addresses of a request, counted from 0 and from 1, since files may do either."""
    match request:
        case ReadRequest(table=table, count=count):
            what = table.value
        case WriteRegisters(words=words):
            what, count = "holding", len(words)
        case WriteCoils(bits=bits):
            what, count = "coil", len(bits)
        case MaskRegister():
            what, count = "a bit of holding", 1
    first, last = request.first, request.first + count - 1
    zero_based = f"{first}" if count == 1 else f"{first} .. {last}"
    one_based = f"{first + 1}" if count == 1 else f"{first + 1} .. {last + 1}"
    return f"{', '.join(request.names)}: {what} {zero_based} counted from 0, {one_based} counted from 1"
