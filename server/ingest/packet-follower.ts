export interface PacketListener {
  /** A packet's fixed header is complete: its type (section 2.1.2) and remaining length. */
  begin?(type: number, length: number): void;
  /** A packet ended before byte `at` of the chunk. */
  end?(at: number): void;
}

/**
 * Follows the borders of control packets in an MQTT byte stream (MQTT 3.1.1 and 5, section 2.1: type, remaining
 * length of up to four bytes of seven bits, then that many bytes) without reading what is in them.
 */
export class PacketFollower {
  /** Bytes of the present packet still to come; null while its fixed header is being read. */
  #remaining: number | null = null;
  #type: number | null = null;
  #length = 0;
  #shift = 0;

  /** @returns false where the bytes are no MQTT: a length of more than four bytes */
  follow(chunk: Uint8Array, listener: PacketListener): boolean {
    let at = 0;
    while (at < chunk.length) {
      if (this.#remaining !== null) {
        const passed = Math.min(this.#remaining, chunk.length - at);
        at += passed;
        this.#remaining -= passed;
      } else if (this.#type === null) {
        this.#type = chunk[at]! >> 4;
        this.#length = 0;
        this.#shift = 0;
        at += 1;
      } else {
        const byte = chunk[at]!;
        at += 1;
        this.#length += (byte & 127) * 2 ** this.#shift;
        this.#shift += 7;
        if (byte >= 128) {
          if (this.#shift > 21) return false;
          continue;
        }
        listener.begin?.(this.#type, this.#length);
        this.#remaining = this.#length;
        this.#type = null;
      }
      if (this.#remaining === 0) {
        this.#remaining = null;
        listener.end?.(at);
      }
    }
    return true;
  }
}
