/** The punctual sites have settled when the decrease promised is this share of its first value since a slow one was asked, */
const SHARE = 1e-2;
/** or after so many rounds with a site unheard. */
const UNHEARD_ROUNDS = 8;

/** Whether the punctual sites have come as far as they can without the slow ones. */
export class LateSettling {
  private first: number | null = null;
  private rounds = 0;

  /** A slow site has been asked, or has answered. */
  begin(): void {
    this.first = null;
  }

  /** `promised`: relative decrease of the step to the candidate. One call a round. */
  hasSettled(promised: number, unheard: boolean): boolean {
    if (this.first === null) {
      this.first = promised;
      this.rounds = 0;
    }
    this.rounds++;
    return promised <= SHARE * this.first || (unheard && this.rounds >= UNHEARD_ROUNDS);
  }
}
